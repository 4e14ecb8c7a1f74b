//! Values with their units as people write them in a scenario: `"1480 rpm"`, `"10 min"`, `"0.25 mm"`.
//!
//! A number, optional blanks, a unit from the list of its dimension; the result is SI (speed stays in rev/min, the
//! only unit anyone uses for it). A number without a unit is refused: guessing is how wrong curves are born.

/// What a value measures.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Dimension {
    Time,
    Speed,
    Length,
    Flow,
    Pressure,
    Torque,
    Share,
    Density,
}

impl Dimension {
    /// Units accepted and their size in the unit kept.
    fn units(self) -> &'static [(&'static str, f64)] {
        match self {
            Self::Time => &[("ms", 1e-3), ("s", 1.0), ("min", 60.0), ("h", 3600.0), ("d", 86_400.0)],
            Self::Speed => &[("rpm", 1.0), ("1/min", 1.0), ("1/s", 60.0)],
            Self::Length => &[("mm", 1e-3), ("cm", 1e-2), ("m", 1.0), ("km", 1e3)],
            Self::Flow => &[("m3/h", 1.0 / 3600.0), ("m3/s", 1.0), ("l/s", 1e-3), ("l/min", 1e-3 / 60.0)],
            Self::Pressure => &[("Pa", 1.0), ("kPa", 1e3), ("mbar", 1e2), ("bar", 1e5), ("MPa", 1e6)],
            Self::Torque => &[("N m", 1.0), ("Nm", 1.0), ("kN m", 1e3)],
            Self::Share => &[("%", 1e-2)],
            Self::Density => &[("kg/m3", 1.0)],
        }
    }

    /// How such a value is written, for messages.
    pub(super) fn example(self) -> &'static str {
        match self {
            Self::Time => "a time such as \"10 min\" (ms, s, min, h, d)",
            Self::Speed => "a speed such as \"1480 rpm\" (rpm, 1/min, 1/s)",
            Self::Length => "a length such as \"0.25 mm\" (mm, cm, m, km)",
            Self::Flow => "a flow such as \"80 m3/h\" (m3/h, m3/s, l/s, l/min)",
            Self::Pressure => "a gauge pressure such as \"1.5 bar\" (Pa, kPa, mbar, bar, MPa)",
            Self::Torque => "a torque such as \"60 N m\" (N m, kN m)",
            Self::Share => "a share such as \"80 %\"",
            Self::Density => "a density such as \"999.1 kg/m3\"",
        }
    }

    /// Reads a value; `None` where number or unit is not understood.
    pub(super) fn parse(self, text: &str) -> Option<f64> {
        let text = text.trim();
        // Cut before the first character that no number holds; an exponent needs care, so `e` counts as a number
        // character only before a digit or sign.
        let bytes = text.as_bytes();
        let cut = (0..bytes.len())
            .find(|&at| match bytes[at] {
                b'0'..=b'9' | b'.' | b'+' | b'-' => false,
                b'e' | b'E' => !bytes.get(at + 1).is_some_and(|next| matches!(next, b'0'..=b'9' | b'+' | b'-')),
                _ => true,
            })
            .unwrap_or(bytes.len());
        let number: f64 = text.get(..cut)?.parse().ok()?;
        let unit = text.get(cut..)?.trim();
        let (_, size) = self.units().iter().find(|(name, _)| *name == unit)?;
        let value = number * size;
        value.is_finite().then_some(value)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn reads_numbers_with_their_units() {
        assert_eq!(Dimension::Time.parse("10 min"), Some(600.0));
        assert_eq!(Dimension::Time.parse("1.5h"), Some(5400.0));
        assert_eq!(Dimension::Pressure.parse("-1 bar"), Some(-1e5));
        assert_eq!(Dimension::Length.parse("2.5e-1 mm"), Some(0.25e-3));
        assert_eq!(Dimension::Torque.parse("120 N m"), Some(120.0));
        assert_eq!(Dimension::Share.parse("75 %"), Some(0.75));
    }

    #[test]
    fn refuses_what_it_does_not_know() {
        for text in ["10", "min", "", "ten min", "10 mn", "1e400 s", "nan s", "10 min 3", "--1 s", "1480 \u{3bc}s"] {
            assert_eq!(Dimension::Time.parse(text), None, "{text:?}");
        }
        assert_eq!(Dimension::Speed.parse("1480 Hz"), None);
    }
}
