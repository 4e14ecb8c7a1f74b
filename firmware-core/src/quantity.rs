//! One small newtype per physical quantity, SI inside, because the mistakes this crate must not make are mistakes of
//! kind: gauge pressure where absolute is meant, torque where energy is meant, revolutions per minute where radians
//! per second are.
//!
//! A constructor and a getter name the unit; there are no implicit conversions and no operators beyond those that
//! physics allows. The types know the unit, not the place: let variable names say `coupling_torque` or `impeller_torque`.
//! They do not check ranges: a quantity can hold NaN, and the laws that take one say what they do with it.

/// What every quantity can do: give and take its SI value. Lets conversions, hashing and records be written once.
pub trait Quantity: Copy {
    /// The value in the quantity's SI unit.
    fn si(self) -> f32;
    /// A quantity from a value in its SI unit.
    fn from_si(value: f32) -> Self;
}

macro_rules! quantity {
    ($(#[$doc:meta])* $name:ident, $from:ident, $get:ident, $unit:literal) => {
        $(#[$doc])*
        #[derive(Clone, Copy, Debug, Default, PartialEq, PartialOrd)]
        #[cfg_attr(feature = "defmt", derive(defmt::Format))]
        pub struct $name(f32);

        impl $name {
            #[doc = concat!("From a value in ", $unit, ".")]
            #[must_use]
            pub const fn $from(value: f32) -> Self {
                Self(value)
            }

            #[doc = concat!("The value in ", $unit, ".")]
            #[must_use]
            pub const fn $get(self) -> f32 {
                self.0
            }
        }

        impl Quantity for $name {
            fn si(self) -> f32 {
                self.0
            }

            fn from_si(value: f32) -> Self {
                Self(value)
            }
        }
    };
}

quantity! {
    /// Head, stored in metres of the pumped liquid; positive when the machine adds energy to the liquid.
    Head, from_metres, metres, "metres of the pumped liquid"
}
quantity! {
    /// Volume flow, stored in m³/s; positive from suction to discharge.
    VolumeFlow, from_cubic_metres_per_second, cubic_metres_per_second, "m³/s"
}
quantity! {
    /// Pressure above the atmosphere at the gauge, stored in pascal; negative below it.
    GaugePressure, from_pascals, pascals, "pascal above the local atmosphere"
}
quantity! {
    /// Difference of two pressures of one fluid, stored in pascal; positive when the first named is higher.
    PressureDifference, from_pascals, pascals, "pascal"
}
quantity! {
    /// Torque about the shaft axis, stored in N·m; positive when the driver turns the impeller.
    Torque, from_newton_metres, newton_metres, "N·m"
}
quantity! {
    /// Power, stored in watts; positive into the shaft, or into the fluid.
    Power, from_watts, watts, "watts"
}
quantity! {
    /// Angular speed, stored in rad/s; positive in the machine's design direction.
    AngularSpeed, from_radians_per_second, radians_per_second, "rad/s"
}
quantity! {
    /// Density, stored in kg/m³; positive.
    Density, from_kilograms_per_cubic_metre, kilograms_per_cubic_metre, "kg/m³"
}
quantity! {
    /// Pressure above vacuum, stored in pascal; positive.
    AbsolutePressure, from_pascals, pascals, "pascal above vacuum"
}
quantity! {
    /// Thermodynamic temperature, stored in kelvin; positive.
    Temperature, from_kelvins, kelvins, "kelvin"
}
quantity! {
    /// Dynamic viscosity μ, stored in Pa·s; positive.
    DynamicViscosity, from_pascal_seconds, pascal_seconds, "Pa·s"
}
quantity! {
    /// Kinematic viscosity ν = μ/ρ, stored in m²/s; positive.
    KinematicViscosity, from_square_metres_per_second, square_metres_per_second, "m²/s"
}
quantity! {
    /// A plain ratio: efficiency, or a flow relative to the flow of best efficiency.
    Ratio, from_fraction, fraction, "parts of one"
}

impl AngularSpeed {
    /// From revolutions per minute: ω = 2πn/60.
    #[must_use]
    pub const fn from_revolutions_per_minute(value: f32) -> Self {
        Self(value * (core::f32::consts::PI / 30.0))
    }

    /// The value in revolutions per minute.
    #[must_use]
    pub const fn revolutions_per_minute(self) -> f32 {
        self.0 * (30.0 / core::f32::consts::PI)
    }
}

impl GaugePressure {
    /// The same pressure above vacuum, where the air at the gauge has the pressure `atmosphere`.
    #[must_use]
    pub fn above(self, atmosphere: AbsolutePressure) -> AbsolutePressure {
        AbsolutePressure(self.0 + atmosphere.0)
    }
}

impl Temperature {
    /// From degrees Celsius: T = t + 273.15. Steps of f32 near 300 K are 3e-5 K.
    #[must_use]
    pub const fn from_degrees_celsius(value: f32) -> Self {
        Self(value + 273.15)
    }

    /// The value in degrees Celsius.
    #[must_use]
    pub const fn degrees_celsius(self) -> f32 {
        self.0 - 273.15
    }
}

impl KinematicViscosity {
    /// From mm²/s (the same number in centistokes).
    #[must_use]
    pub const fn from_square_millimetres_per_second(value: f32) -> Self {
        Self(value * 1e-6)
    }

    /// The value in mm²/s.
    #[must_use]
    pub const fn square_millimetres_per_second(self) -> f32 {
        self.0 * 1e6
    }
}

impl core::ops::Mul<AngularSpeed> for Torque {
    type Output = Power;

    /// P = T·ω; a torque plus a head does not compile.
    fn mul(self, omega: AngularSpeed) -> Power {
        Power(self.0 * omega.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn speed_converts_both_ways() {
        let speed = AngularSpeed::from_revolutions_per_minute(1480.0);
        assert!((speed.radians_per_second() - 154.985_24).abs() < 1e-4);
        assert!((speed.revolutions_per_minute() - 1480.0).abs() < 2e-4);
    }

    #[test]
    fn temperature_pressure_and_viscosity_convert() {
        let boiling = Temperature::from_degrees_celsius(100.0);
        assert_eq!(boiling, Temperature::from_kelvins(373.15));
        assert!((boiling.degrees_celsius() - 100.0).abs() < 4e-5);
        let suction = GaugePressure::from_pascals(-30_000.0).above(AbsolutePressure::from_pascals(101_325.0));
        assert_eq!(suction, AbsolutePressure::from_pascals(71_325.0));
        let oil = KinematicViscosity::from_square_millimetres_per_second(120.0);
        assert!((oil.square_metres_per_second() - 1.2e-4).abs() < 1e-11);
        assert!((oil.square_millimetres_per_second() - 120.0).abs() < 2e-5);
    }

    #[test]
    fn torque_times_speed_is_power() {
        let power = Torque::from_newton_metres(50.0) * AngularSpeed::from_radians_per_second(150.0);
        assert_eq!(power, Power::from_watts(7500.0));
    }
}
