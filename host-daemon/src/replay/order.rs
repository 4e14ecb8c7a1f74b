//! Which rows of a recorded file are in order, and where time has gaps.
//!
//! The watch's clock does not go back. A row earlier than one already passed on is out of order. One wild time far
//! ahead must not put every later row out of order, so each row waits for the next: if the next is earlier than the
//! waiting row but not earlier than those before it, the waiting row is the one that is wrong. Several wild rows in a
//! row are believed.

use super::Findings;

/// A step this many times the usual one is a gap.
const GAP_STEPS: f64 = 5.0;
/// Steps that the usual one is found from.
const STEPS_FOR_MEDIAN: usize = 10_000;

/// A row that waits, or one just passed on.
pub(super) struct Held<T> {
    line: u64,
    /// Its time, s.
    pub(super) at: f64,
    /// Its time as the file writes it.
    pub(super) time: Vec<u8>,
    pub(super) what: T,
}

/// Sorts out the rows that are out of order.
pub(super) struct Order<T> {
    waiting: Option<Held<T>>,
    passed: Option<Held<T>>,
    gaps: GapFinder,
}

impl<T> Default for Order<T> {
    fn default() -> Self {
        Self { waiting: None, passed: None, gaps: GapFinder::default() }
    }
}

impl<T: Copy> Order<T> {
    /// Takes the next row; a row that is certainly in order comes out, one call later than it went in.
    pub(super) fn push(
        &mut self,
        line: u64,
        at: f64,
        time: &[u8],
        what: &T,
        findings: &mut Findings,
    ) -> Option<&Held<T>> {
        let Some(waiting) = &mut self.waiting else {
            self.waiting = Some(Held { line, at, time: time.to_vec(), what: *what });
            return None;
        };
        if at >= waiting.at {
            if let Some(passed) = &mut self.passed {
                self.gaps.step(waiting.line, waiting.at - passed.at, findings);
                std::mem::swap(passed, waiting);
            } else {
                self.passed = Some(Held { line, at, time: Vec::new(), what: *what });
                std::mem::swap(self.passed.as_mut()?, waiting);
            }
        } else if self.passed.as_ref().is_none_or(|passed| at < passed.at) {
            findings.out_of_order(line, time);
            return None;
        } else {
            findings.out_of_order(waiting.line, &waiting.time);
            Self::fill(waiting, line, at, time, what);
            return None;
        }
        Self::fill(waiting, line, at, time, what);
        self.passed.as_ref()
    }

    /// Overwrites in place: the time's buffer is used again.
    fn fill(held: &mut Held<T>, line: u64, at: f64, time: &[u8], what: &T) {
        held.line = line;
        held.at = at;
        held.time.clear();
        held.time.extend_from_slice(time);
        held.what = *what;
    }

    /// The last row, and the gaps that still wait for a usual step.
    pub(super) fn finish(&mut self, findings: &mut Findings) -> Option<&Held<T>> {
        if let (Some(passed), Some(waiting)) = (&self.passed, &self.waiting) {
            self.gaps.step(waiting.line, waiting.at - passed.at, findings);
        }
        self.gaps.finish(findings);
        self.waiting.as_ref()
    }
}

/// Finds gaps: steps longer than five times the median of the first ten thousand. Steps are kept until that median is
/// known, so a short file is judged at its end.
#[derive(Default)]
struct GapFinder {
    waiting: Vec<(u64, f64)>,
    usual: Option<f64>,
}

impl GapFinder {
    /// A step, s, that ended at a line.
    fn step(&mut self, line: u64, step: f64, findings: &mut Findings) {
        match self.usual {
            Some(usual) => Self::judge(line, step, usual, findings),
            None => {
                self.waiting.push((line, step));
                if self.waiting.len() == STEPS_FOR_MEDIAN {
                    self.finish(findings);
                }
            }
        }
    }

    /// Judges the steps that still wait.
    fn finish(&mut self, findings: &mut Findings) {
        let waiting = std::mem::take(&mut self.waiting);
        let mut steps: Vec<f64> = waiting.iter().map(|(_, step)| *step).collect();
        let middle = steps.len() / 2;
        if middle >= steps.len() {
            return;
        }
        let usual = *steps.select_nth_unstable_by(middle, f64::total_cmp).1;
        self.usual = Some(usual);
        for (line, step) in waiting {
            Self::judge(line, step, usual, findings);
        }
    }

    fn judge(line: u64, step: f64, usual: f64, findings: &mut Findings) {
        if step > GAP_STEPS * usual && usual > 0.0 {
            findings.gap(line, step, usual);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Pushes times; gives back those passed on and the lines called out of order.
    fn order(times: &[f64]) -> (Vec<f64>, Vec<String>, Findings) {
        let (mut order, mut findings, mut passed) = (Order::default(), Findings::default(), Vec::new());
        for (line, &at) in times.iter().enumerate() {
            let text = at.to_string();
            passed.extend(order.push(line as u64, at, text.as_bytes(), &(), &mut findings).map(|held| held.at));
        }
        passed.extend(order.finish(&mut findings).map(|held| held.at));
        (passed, findings.out_of_order.first.clone(), findings)
    }

    #[test]
    fn rows_in_order_all_pass() {
        let (passed, wrong, _) = order(&[1.0, 2.0, 2.0, 3.0]);
        assert_eq!((passed, wrong), (vec![1.0, 2.0, 2.0, 3.0], vec![]));
        assert!(order(&[]).0.is_empty());
        assert_eq!(order(&[7.0]).0, [7.0]);
    }

    #[test]
    fn a_late_row_is_out_of_order() {
        let (passed, wrong, _) = order(&[1.0, 2.0, 3.0, 1.5, 4.0]);
        assert_eq!(passed, [1.0, 2.0, 3.0, 4.0]);
        assert_eq!(wrong, ["line 3: 1.5"]);
    }

    #[test]
    fn one_wild_time_ahead_costs_only_its_own_row() {
        let (passed, wrong, _) = order(&[1.0, 2.0, 1e9, 3.0, 4.0]);
        assert_eq!(passed, [1.0, 2.0, 3.0, 4.0]);
        assert_eq!(wrong, ["line 2: 1000000000"]);
    }

    #[test]
    fn a_gap_is_a_step_of_more_than_five_usual_ones() {
        let (_, _, findings) = order(&[0.0, 1.0, 2.0, 7.0, 8.0, 13.5, 14.0]);
        assert_eq!(findings.gaps.first, ["line 5: 5.5 s after the row before it, where 1 s is usual"]);
        assert_eq!(findings.gaps.count, 1);
    }
}
