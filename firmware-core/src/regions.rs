//! Where on its curve a machine runs, and for how long: the preferred operating region, the allowable one, minimum
//! thermal flow, and the specific speeds that the guideline figures hang on.
//!
//! `n_q = n·√Q/H^0.75` (n in rev/min), `ω_s = ω·√Q/(gH)^0.75` (the type number), `N_s = 51.645·n_q` (rev/min, US gal/min,
//! ft); all at best efficiency and full diameter, head per stage, half the flow per eye of a double-suction wheel.
//! Power that stays in the liquid warms it: `ΔT = (gH/c_p)·(1/η − 1)`, and at shut-off `Q_min = P/(ρ·c_p·ΔT_max)`.
//!
//! The preferred region is a guideline figure, the allowable region is the maker's: there is no general figure for it,
//! so it is declared or absent. Not modelled: what a region does to a machine's life; heat lost through the casing.
//!
//! Time is counted in whole milliseconds in u64 (580 million years); an f32 total would stop counting.

use crate::math;

/// n_q up to which [`PREFERRED_LOW_SPEED`] holds (N_s 4500).
pub const PREFERRED_LIMIT: f32 = 87.0;

/// Preferred operating region for n_q up to 87, relative to best efficiency flow.
///
/// Source: ANSI/HI 9.6.3, as quoted in a trade-journal article on the 2012 edition.
pub const PREFERRED_LOW_SPEED: Span = Span { low: 0.70, high: 1.20 };

/// Preferred operating region above n_q 87. Source: ANSI/HI 9.6.3, from memory; an article on the 2012 edition prints
/// 1.20 as the upper end, of the two the narrower is the default.
pub const PREFERRED_HIGH_SPEED: Span = Span { low: 0.80, high: 1.15 };

/// `N_s(US)/n_q`, and of the suction specific speeds: √(gal/min per m³/s)/(ft per m)^0.75, derived.
pub const US_PER_METRIC: f32 = 51.645_24;

/// A range of flow relative to best efficiency flow, ends included.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Span {
    /// Lower end.
    pub low: f32,
    /// Upper end.
    pub high: f32,
}

/// Preferred operating region by specific speed; NaN gives the narrower one.
#[must_use]
pub fn preferred_by_specific_speed(n_q: f32) -> Span {
    if n_q <= PREFERRED_LIMIT { PREFERRED_LOW_SPEED } else { PREFERRED_HIGH_SPEED }
}

/// Specific speed n_q (rev/min, m³/s, m): `n·√Q/H^0.75`.
///
/// `None` unless speed, flow and head are positive and finite. Relative error below 1e-6.
///
/// # Examples
/// ```
/// # use offcurve_core::regions::specific_speed;
/// let n_q = specific_speed(1450.0, 0.0625, 16.0).expect("positive inputs");
/// assert!((n_q - 1450.0 * 0.25 / 8.0).abs() < 1e-3);
/// ```
#[must_use]
pub fn specific_speed(revolutions_per_minute: f32, flow: f32, head: f32) -> Option<f32> {
    positive([revolutions_per_minute, flow, head])?;
    Some(revolutions_per_minute * math::sqrt(flow) / three_quarters(head)).filter(|found| found.is_finite())
}

/// Type number ω_s (rad/s, m³/s, m, m/s²): `ω·√Q/(gH)^0.75`, dimensionless, and ISO's K.
///
/// `None` unless all inputs are positive and finite.
#[must_use]
pub fn type_number(radians_per_second: f32, flow: f32, head: f32, gravity: f32) -> Option<f32> {
    positive([radians_per_second, flow, head, gravity])?;
    Some(radians_per_second * math::sqrt(flow) / three_quarters(gravity * head)).filter(|found| found.is_finite())
}

/// US specific speed N_s (rev/min, US gal/min, ft) from n_q.
#[must_use]
pub const fn us_specific_speed(n_q: f32) -> f32 {
    US_PER_METRIC * n_q
}

/// `x^0.75 = √x·√√x`; micromath's power function is percents off.
fn three_quarters(x: f32) -> f32 {
    let root = math::sqrt(x);
    root * math::sqrt(root)
}

fn positive<const N: usize>(all: [f32; N]) -> Option<()> {
    all.iter().all(|value| value.is_finite() && *value > 0.0).then_some(())
}

/// Temperature rise of the liquid through the machine, K: `(gH/c_p)·(1/η − 1)`, from an energy balance without loss of
/// heat. Head in m, efficiency as a part of one, specific heat in J/(kg·K).
///
/// `None` unless all inputs are positive and finite and the efficiency is at most 1.
#[must_use]
pub fn temperature_rise(head: f32, efficiency: f32, specific_heat: f32, gravity: f32) -> Option<f32> {
    positive([head, efficiency, specific_heat, gravity])?;
    (efficiency <= 1.0).then(|| gravity * head / specific_heat * (1.0 / efficiency - 1.0))
}

/// Minimum thermal flow, m³/s: `P/(ρ·c_p·ΔT_max)`, all of the shaft power (W) warming the liquid.
///
/// `None` unless all inputs are positive and finite.
#[must_use]
pub fn minimum_thermal_flow(power: f32, density: f32, specific_heat: f32, largest_rise: f32) -> Option<f32> {
    positive([power, density, specific_heat, largest_rise])?;
    Some(power / (density * specific_heat * largest_rise)).filter(|found| found.is_finite())
}

/// What a pump is used for, as the guideline on suction margin divides it.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Service {
    /// Hydrocarbon process.
    Hydrocarbon,
    /// Chemical process.
    Chemical,
    /// Power (not nuclear), water and wastewater, pulp and paper.
    WaterAndPower,
    /// Building services.
    Building,
}

/// Margin of available over required NPSH; the greater of the two governs.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct SuctionMargin {
    /// Available over required, at least.
    pub ratio: f32,
    /// Available less required, m, at least.
    pub metres: f32,
}

impl SuctionMargin {
    /// NPSH the plant must offer for a machine that needs `required` (m).
    #[must_use]
    pub fn available_needed(&self, required: f32) -> f32 {
        (self.ratio * required).max(required + self.metres)
    }
}

/// Suction specific speed (rev/min, m³/s, m) above which chemical process pumps need more outside the preferred
/// region (11,000 in US units). Source: as [`default_suction_margin`].
pub const HIGH_SUCTION_SPEED_CHEMICAL: f32 = 210.0;
/// The same for water, power and building services (7,500 in US units).
pub const HIGH_SUCTION_SPEED_WATER: f32 = 145.0;

/// Default suction margin within the allowable region, by service and suction specific speed (rev/min, m³/s, m; NaN
/// counts as high).
///
/// Source: ANSI/HI 9.6.1, as condensed on a one-page summary of the guideline. "Above 1.0" for building services is given as a ratio
/// of 1 here.
#[must_use]
pub fn default_suction_margin(service: Service, suction_specific_speed: f32, preferred: bool) -> SuctionMargin {
    let low = |limit: f32| suction_specific_speed <= limit;
    let (ratio, metres) = match service {
        Service::Hydrocarbon => (1.1, 1.0),
        Service::Chemical if low(HIGH_SUCTION_SPEED_CHEMICAL) || preferred => (1.1, 0.6),
        Service::WaterAndPower if low(HIGH_SUCTION_SPEED_WATER) => (1.1, 0.6),
        Service::Chemical | Service::WaterAndPower => (1.2, 1.0),
        Service::Building if low(HIGH_SUCTION_SPEED_WATER) => (1.0, 0.0),
        Service::Building => (1.1, 0.6),
    };
    SuctionMargin { ratio, metres }
}

/// Where a machine runs.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Region {
    /// Below the allowable region.
    BelowAllowable,
    /// Allowable, below the preferred region.
    Low,
    /// Preferred.
    Preferred,
    /// Allowable, above the preferred region.
    High,
    /// Above the allowable region.
    AboveAllowable,
    /// Running, flow not known.
    Unknown,
    /// Not running.
    Stopped,
}

impl Region {
    /// How many there are.
    pub const COUNT: usize = 7;

    /// All, in the order of the totals.
    pub const ALL: [Self; Self::COUNT] = [
        Self::BelowAllowable,
        Self::Low,
        Self::Preferred,
        Self::High,
        Self::AboveAllowable,
        Self::Unknown,
        Self::Stopped,
    ];
}

/// Why limits do not make regions.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum RegionError {
    /// Ends must be finite and rise: allowable low, preferred low, preferred high, allowable high, equal ends allowed
    /// where an outer part is to be empty.
    NotRising,
    /// The deadband must be finite, not negative, and below half the width of the preferred region.
    BadDeadband,
}

/// Limits of the regions of one machine.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Regions {
    preferred: Span,
    allowable: Option<Span>,
    deadband: f32,
}

impl Regions {
    /// Regions from the preferred one, the maker's allowable one if declared, and a deadband (relative flow) that a
    /// flow must come back inside a limit before it counts as back.
    ///
    /// # Errors
    /// [`RegionError`].
    pub fn new(preferred: Span, allowable: Option<Span>, deadband: f32) -> Result<Self, RegionError> {
        let outer = allowable.unwrap_or(preferred);
        let ends = [outer.low, preferred.low, preferred.high, outer.high];
        let rising = outer.low <= preferred.low && preferred.low < preferred.high && preferred.high <= outer.high;
        if !rising || !ends.iter().all(|end| end.is_finite()) {
            return Err(RegionError::NotRising);
        }
        if !(0.0..0.5 * (preferred.high - preferred.low)).contains(&deadband) {
            return Err(RegionError::BadDeadband);
        }
        Ok(Self { preferred, allowable, deadband })
    }

    /// The region of a flow relative to best efficiency flow at this speed, coming from `before`. A limit is passed
    /// outwards at the limit and inwards a deadband inside it. Without an allowable region all that is not preferred is
    /// low or high.
    fn region(&self, relative_flow: f32, before: Region) -> Region {
        let x = relative_flow;
        if !x.is_finite() {
            return Region::Unknown;
        }
        // Whether a flow is beyond a limit; who was beyond it already stays until the deadband is passed.
        let below = |limit: f32, already: bool| x < limit || already && x < limit + self.deadband;
        let above = |limit: f32, already: bool| x > limit || already && x > limit - self.deadband;
        let low = below(self.preferred.low, matches!(before, Region::Low | Region::BelowAllowable));
        let high = above(self.preferred.high, matches!(before, Region::High | Region::AboveAllowable));
        // The outer limits' deadband lies inside the allowable region; it does not reach into the preferred one.
        let too_low = self.allowable.is_some_and(|span| low && below(span.low, before == Region::BelowAllowable));
        let too_high = self.allowable.is_some_and(|span| high && above(span.high, before == Region::AboveAllowable));
        match (too_low, low, high, too_high) {
            (true, ..) => Region::BelowAllowable,
            (_, true, ..) => Region::Low,
            (.., true) => Region::AboveAllowable,
            (_, _, true, _) => Region::High,
            _ => Region::Preferred,
        }
    }
}

/// Time spent in each region.
#[derive(Clone, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct RegionClock {
    milliseconds: [u64; Region::COUNT],
    flow_region: Region,
}

impl Default for RegionClock {
    fn default() -> Self {
        Self::from_milliseconds([0; Region::COUNT])
    }
}

impl RegionClock {
    /// Goes on from totals saved before, in the order of [`Region::ALL`].
    #[must_use]
    pub const fn from_milliseconds(milliseconds: [u64; Region::COUNT]) -> Self {
        Self { milliseconds, flow_region: Region::Preferred }
    }

    /// Totals in the order of [`Region::ALL`], to be saved.
    #[must_use]
    pub const fn milliseconds(&self) -> [u64; Region::COUNT] {
        self.milliseconds
    }

    /// Whole hours spent in a region.
    #[must_use]
    pub fn hours(&self, region: Region) -> u64 {
        self.milliseconds.get(region as usize).map_or(0, |total| total / 3_600_000)
    }

    /// Counts one step of `elapsed_ms` that ended with this relative flow (`None`: not known) and gives its region. The
    /// region last known is kept over a stop or a gap, for the deadband.
    pub fn step(&mut self, regions: &Regions, running: bool, relative_flow: Option<f32>, elapsed_ms: u32) -> Region {
        let region = match relative_flow {
            _ if !running => Region::Stopped,
            Some(flow) => regions.region(flow, self.flow_region),
            None => Region::Unknown,
        };
        if !matches!(region, Region::Stopped | Region::Unknown) {
            self.flow_region = region;
        }
        if let Some(total) = self.milliseconds.get_mut(region as usize) {
            *total = total.saturating_add(u64::from(elapsed_ms));
        }
        region
    }
}

#[cfg(test)]
mod tests;
