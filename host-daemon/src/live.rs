//! The live line of each machine: what it does now and how that stands against its curve, for a person at a terminal.
//!
//! On a terminal the lines are rewritten in place about once a second, and log lines go above them; into a pipe or file
//! they are printed every five seconds. Plant time counts from the first record shown. "±" is twice the standard
//! uncertainty (about 95 %), and the value is rounded to it.

use crate::alarm::AlarmKind;
use offcurve_core::{
    estimate::{Estimate, Missing},
    link::Record,
    quantity::AngularSpeed,
    sensing::{Channel, Reading},
};
use std::{
    io::{IsTerminal, Write},
    sync::{
        Arc, Condvar, Mutex, MutexGuard, PoisonError,
        atomic::{AtomicBool, Ordering},
    },
    thread::JoinHandle,
    time::{Duration, Instant},
};
use tracing_subscriber::fmt::MakeWriter;

/// Silence of a line after which its values are no longer shown as present; three records where they come slowly.
const SILENT: Duration = Duration::from_secs(5);
/// Time between two looks on a terminal, and into a file.
const EVERY: (Duration, Duration) = (Duration::from_secs(1), Duration::from_secs(5));

/// The present state of every machine.
#[derive(Debug)]
pub struct Board {
    machines: Mutex<Vec<Machine>>,
}

#[derive(Debug)]
struct Machine {
    name: String,
    /// When the daemon began to listen, or the newest record came.
    since: Instant,
    silent_after: Duration,
    first_us: i64,
    now: Option<Now>,
    active: Vec<AlarmKind>,
    cause: Option<String>,
}

#[derive(Clone, Copy, Debug)]
struct Now {
    at_us: i64,
    record: Record,
    estimate: Estimate,
}

impl Board {
    /// A board for these machines, in the order of the configuration: name, and time between two records.
    #[must_use]
    pub fn new(machines: impl IntoIterator<Item = (String, Duration)>) -> Self {
        let fresh = |(name, interval): (String, Duration)| Machine {
            name,
            since: Instant::now(),
            silent_after: SILENT.max(3 * interval),
            first_us: 0,
            now: None,
            active: Vec::new(),
            cause: None,
        };
        Self { machines: Mutex::new(machines.into_iter().map(fresh).collect()) }
    }

    fn machines(&self) -> MutexGuard<'_, Vec<Machine>> {
        self.machines.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// Takes a record of the machine at `place` with its estimate; `at_us` is its time, µs since 1970 UTC.
    pub fn update(&self, place: usize, at_us: i64, record: &Record, estimate: &Estimate, active: Vec<AlarmKind>) {
        if let Some(machine) = self.machines().get_mut(place) {
            if machine.now.is_none() {
                machine.first_us = at_us;
            }
            machine.since = Instant::now();
            machine.now = Some(Now { at_us, record: *record, estimate: *estimate });
            machine.active = active;
        }
    }

    /// The likeliest cause of the off-curve alarm of the machine at `place`.
    pub fn set_cause(&self, place: usize, cause: Option<&str>) {
        if let Some(machine) = self.machines().get_mut(place) {
            machine.cause = cause.map(str::to_owned);
        }
    }

    /// A line for each machine.
    #[must_use]
    pub fn lines(&self) -> Vec<String> {
        self.rows().iter().map(Row::whole).collect()
    }

    fn rows(&self) -> Vec<Row> {
        let machines = self.machines();
        let width = machines.iter().map(|machine| machine.name.chars().count()).max().unwrap_or(0);
        machines.iter().map(|machine| row(machine, width, machine.since.elapsed())).collect()
    }
}

/// The parts of a line: on a narrow terminal they go on two or three.
struct Row {
    /// Name, time, readings.
    figures: String,
    /// Efficiency and the deviation from the curve; empty without a present state.
    judgement: String,
    /// How it stands, in words.
    state: String,
}

impl Row {
    /// All of it in one line.
    fn whole(&self) -> String {
        let parts = [&self.figures, &self.judgement, &self.state];
        parts.into_iter().filter(|part| !part.is_empty()).map(String::as_str).collect::<Vec<_>>().join("  ")
    }

    /// The row on a terminal of so many columns (0: not known). A line that wraps by itself would be counted as one and
    /// leave its rest behind when it is drawn again; a number cut at the edge would be another number.
    fn fit(&self, columns: usize) -> Vec<String> {
        let whole = self.whole();
        let fits = |text: &str| text.chars().count() < columns;
        if columns < 20 || fits(&whole) {
            return vec![whole];
        }
        let cut = |text: String| text.chars().take(columns - 1).collect();
        let both = format!("{}  {}", self.figures, self.judgement);
        let state = cut(format!("    {}", self.state));
        if fits(&both) || self.judgement.is_empty() {
            return vec![cut(if self.judgement.is_empty() { self.figures.clone() } else { both }), state];
        }
        vec![cut(self.figures.clone()), cut(format!("    {}", self.judgement)), state]
    }
}

fn row(machine: &Machine, width: usize, silent: Duration) -> Row {
    let name = &machine.name;
    let Some(now) = &machine.now else {
        let state = if silent < machine.silent_after {
            "waiting for the first record".into()
        } else {
            format!("no data yet, for {} s", silent.as_secs())
        };
        return Row { figures: format!("{name:<width$}"), judgement: String::new(), state };
    };
    let time = clock_words(now.at_us.saturating_sub(machine.first_us));
    if silent >= machine.silent_after {
        let alarm = if machine.active.is_empty() { String::new() } else { format!("; {}", state_words(machine, now)) };
        let state = format!("no data for {} s{alarm}", silent.as_secs());
        return Row { figures: format!("{name:<width$}  {time}"), judgement: String::new(), state };
    }
    let speed = value(now.record.sample.channel(Channel::Speed))
        .map(|speed| format!("{:.0} rev/min", AngularSpeed::from_radians_per_second(speed).revolutions_per_minute()));
    let flow = value(now.record.sample.channel(Channel::Flow)).map(|flow| format!("{:.1} m3/h", 3600.0 * flow));
    let head = now.estimate.head.ok().map(|head| {
        let (value, uncertainty) = rounded(head.value.metres().into(), head.deviation.metres().into());
        format!("{value} m (±{uncertainty})")
    });
    let efficiency = now.estimate.efficiency.ok().map(|part| format!("{:.0} %", 100.0 * part.value.fraction()));
    let against = match (now.estimate.head_residual, now.estimate.expected_head) {
        (Ok(residual), Ok(expected)) if expected.value.metres() != 0.0 => {
            let share = 100.0 * residual.value.metres() / expected.value.metres();
            // Never "-0.0 %": what rounds to zero has no sign.
            Some(if share.abs() < 0.05 { "0.0 %".to_owned() } else { format!("{share:+.1} %") })
        }
        _ => None,
    };
    let or_dash = |text: Option<String>| text.unwrap_or_else(|| "-".into());
    let figures =
        format!("{name:<width$}  {time}  {:>12}  {:>10}  head {:>14}", or_dash(speed), or_dash(flow), or_dash(head));
    let judgement = format!("efficiency {:>4}  against curve {:>7}", or_dash(efficiency), or_dash(against));
    Row { figures, judgement, state: state_words(machine, now) }
}

fn value(reading: &Reading) -> Option<f32> {
    reading.ok().map(|reading| reading.value)
}

/// The state in words, the gravest thing first.
fn state_words(machine: &Machine, now: &Now) -> String {
    if machine.active.contains(&AlarmKind::OffCurve) {
        return format!("OFF CURVE: {}", machine.cause.as_deref().unwrap_or("cause not known"));
    }
    if let Some(first) = machine.active.first() {
        return match first {
            AlarmKind::EstimateMismatch => "controller and daemon compute different estimates".into(),
            AlarmKind::SensorFailed(channel) => format!("sensor alarm: {}", Missing::Channel(*channel).name()),
            other => other.to_string(),
        };
    }
    match now.estimate.head_residual {
        Ok(_) => "no alarm".into(),
        Err(Missing::NotRunning) => "not running".into(),
        Err(missing) => format!("not compared: {}", missing.name()),
    }
}

/// "01:02:03"; hours go beyond 99.
fn clock_words(microseconds: i64) -> String {
    let seconds = microseconds.max(0) / 1_000_000;
    format!("{:02}:{:02}:{:02}", seconds / 3600, seconds / 60 % 60, seconds % 60)
}

/// Value and twice the standard uncertainty, both rounded to the latter: two digits of it when it begins with 1, else
/// one; never coarser than 1.
fn rounded(value: f64, deviation: f64) -> (String, String) {
    let expanded = 2.0 * deviation;
    if !(expanded.is_finite() && expanded > 0.0) {
        return (format!("{value:.2}"), format!("{expanded:.2}"));
    }
    let exponent = expanded.log10().floor();
    let leading = expanded / 10_f64.powf(exponent);
    let digits = if leading < 1.95 { 1.0 } else { 0.0 } - exponent;
    let decimals = digits.clamp(0.0, 6.0) as usize;
    (format!("{value:.decimals$}"), format!("{expanded:.decimals$}"))
}

/// Where live lines and log lines meet: on a terminal the live lines stay at the bottom.
#[derive(Debug, Default)]
pub struct Screen {
    /// The lines drawn in place, to be drawn again below a log line.
    drawn: Mutex<Vec<String>>,
}

impl Screen {
    /// Draws the rows over those drawn before.
    fn draw(&self, rows: &[Row]) {
        let mut drawn = self.drawn.lock().unwrap_or_else(PoisonError::into_inner);
        let columns = rustix::termios::tcgetwinsize(std::io::stdout()).map_or(0, |size| usize::from(size.ws_col));
        let lines: Vec<String> = rows.iter().flat_map(|row| row.fit(columns)).collect();
        let text = format!("{}{}\n", erase(drawn.len()), lines.join("\n"));
        *drawn = lines;
        // A terminal that has gone is no reason to stop watching.
        let _ = std::io::stdout().lock().write_all(text.as_bytes());
        let _ = std::io::stdout().lock().flush();
    }
}

/// Moves to the first of `count` drawn lines and clears from there (ECMA-48 control sequences).
fn erase(count: usize) -> String {
    if count == 0 { String::new() } else { format!("\x1b[{count}A\r\x1b[J") }
}

/// One log line on its way out.
#[derive(Debug)]
pub struct LogLine<'a>(&'a Screen);

impl Write for LogLine<'_> {
    fn write(&mut self, bytes: &[u8]) -> std::io::Result<usize> {
        let drawn = self.0.drawn.lock().unwrap_or_else(PoisonError::into_inner);
        if drawn.is_empty() {
            return std::io::stderr().write(bytes);
        }
        let mut out = std::io::stdout().lock();
        out.write_all(erase(drawn.len()).as_bytes())?;
        out.flush()?;
        std::io::stderr().write_all(bytes)?;
        out.write_all(format!("{}\n", drawn.join("\n")).as_bytes())?;
        out.flush()?;
        Ok(bytes.len())
    }

    fn flush(&mut self) -> std::io::Result<()> {
        Ok(())
    }
}

/// Puts log lines above the live lines of a screen.
#[derive(Clone, Debug)]
pub struct LogAbove(pub Arc<Screen>);

impl<'a> MakeWriter<'a> for LogAbove {
    type Writer = LogLine<'a>;

    fn make_writer(&'a self) -> Self::Writer {
        LogLine(&self.0)
    }
}

/// The thread that shows a board.
#[derive(Debug)]
pub struct Display {
    stop: Arc<(Mutex<bool>, Condvar)>,
    ended: Arc<AtomicBool>,
    thread: JoinHandle<()>,
}

impl Display {
    /// Starts showing.
    ///
    /// # Errors
    /// When the system has no thread left.
    pub fn start(board: Arc<Board>, screen: Arc<Screen>) -> std::io::Result<Self> {
        let stop = Arc::new((Mutex::new(false), Condvar::new()));
        let ended = Arc::new(AtomicBool::new(false));
        let (told, done) = (Arc::clone(&stop), Arc::clone(&ended));
        let thread = std::thread::Builder::new().name("live".into()).spawn(move || {
            let in_place = std::io::stdout().is_terminal();
            let every = if in_place { EVERY.0 } else { EVERY.1 };
            let mut stopped = told.0.lock().unwrap_or_else(PoisonError::into_inner);
            while !*stopped {
                stopped = told.1.wait_timeout(stopped, every).unwrap_or_else(PoisonError::into_inner).0;
                if in_place {
                    screen.draw(&board.rows());
                } else {
                    // A reader that has gone (`| head`) is no reason to stop watching.
                    let _ = writeln!(std::io::stdout().lock(), "{}", board.lines().join("\n"));
                }
            }
            done.store(true, Ordering::Release);
        })?;
        Ok(Self { stop, ended, thread })
    }

    /// Shows the last state and ends.
    pub fn stop(self) {
        *self.stop.0.lock().unwrap_or_else(PoisonError::into_inner) = true;
        self.stop.1.notify_all();
        let begun = Instant::now();
        // A terminal that takes no more output (Ctrl-S) must not hold up the stop.
        while begun.elapsed() < Duration::from_millis(200) {
            if self.ended.load(Ordering::Acquire) {
                // It has nothing to say, and a panic has been printed.
                let _ = self.thread.join();
                return;
            }
            std::thread::sleep(Duration::from_millis(5));
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use offcurve_core::{
        conditioning::ConditionedSample,
        deviation::Deviation,
        estimate::{Estimated, Source, estimate},
        guard::Advisories,
        quantity::{Head, Quantity, Ratio},
        sensing::ChannelValue,
    };
    use std::path::Path;

    fn estimated<T: Quantity>(value: f32, deviation: f32) -> Estimated<T> {
        Estimated { value: T::from_si(value), deviation: T::from_si(deviation), source: Source::Measured }
    }

    /// A pump that runs 2 % below its curve, twelve minutes and 34 seconds after its first record.
    fn running() -> Machine {
        let text = include_str!("../demo/well-pump-1.toml");
        let profile = crate::config::Machine::parse(text, Path::new("well-pump-1.toml")).unwrap().profile;
        let reading = |value| Ok(ChannelValue { value, deviation: Deviation::from_code(9), saturated: false, age: 0 });
        let sample = ConditionedSample { speed: reading(154.985), flow: reading(0.0233), ..ConditionedSample::EMPTY };
        // What it makes of this sample is replaced by round figures.
        let mut estimate = estimate(&sample, &profile);
        estimate.head = Ok(estimated::<Head>(31.36, 0.08));
        estimate.expected_head = Ok(estimated::<Head>(32.0, 0.3));
        estimate.head_residual = Ok(estimated::<Head>(-0.64, 0.3));
        estimate.efficiency = Ok(estimated::<Ratio>(0.743, 0.01));
        let record = Record::new((7, 1, 0, 0), sample, Advisories::NONE, &estimate);
        Machine {
            name: "Pump".into(),
            since: Instant::now(),
            silent_after: SILENT,
            first_us: 1_000_000,
            now: Some(Now { at_us: 755_000_000, record, estimate }),
            active: Vec::new(),
            cause: None,
        }
    }

    fn show(machine: &Machine, silent: u64) -> String {
        let row = row(machine, 6, Duration::from_secs(silent));
        let text = row.whole();
        text.split_whitespace().collect::<Vec<_>>().join(" ")
    }

    #[test]
    fn one_line_says_it_all() {
        let machine = running();
        assert_eq!(
            show(&machine, 0),
            "Pump 00:12:34 1480 rev/min 83.9 m3/h head 31.36 m (±0.16) efficiency 74 % against curve -2.0 % no \
             alarm"
        );
        let figures = row(&machine, 6, Duration::ZERO).figures;
        assert!(figures.starts_with("Pump    00:12:34  "), "names of other lengths line up: {figures}");
    }

    #[test]
    fn a_narrow_terminal_still_shows_the_state() {
        let row = row(&running(), 6, Duration::ZERO);
        assert_eq!(row.fit(0).len(), 1);
        assert_eq!(row.fit(200).len(), 1);
        // The numbers are whole or on a line of their own, whatever the width.
        for columns in 50..140 {
            let lines = row.fit(columns);
            assert!(lines.iter().all(|line| line.chars().count() < columns), "{lines:?}");
            assert!(lines.last().unwrap().ends_with("no alarm"), "{lines:?}");
            assert!(lines.iter().any(|line| line.contains("against curve  -2.0 %")), "{lines:?}");
        }
        assert_eq!(row.fit(110).len(), 2);
        let three = row.fit(80);
        assert_eq!(three[1..], ["    efficiency 74 %  against curve  -2.0 %", "    no alarm"]);
    }

    #[test]
    fn a_deviation_that_rounds_to_zero_has_no_sign() {
        let mut machine = running();
        if let Some(now) = &mut machine.now {
            now.estimate.head_residual = Ok(estimated::<Head>(-0.01, 0.3));
        }
        assert!(show(&machine, 0).contains("against curve 0.0 %"), "{}", show(&machine, 0));
    }

    #[test]
    fn what_is_missing_is_said() {
        let mut machine = running();
        if let Some(now) = &mut machine.now {
            now.record.sample.flow = Err(offcurve_core::sensing::ChannelFault::FailureLow);
            now.estimate.efficiency = Err(Missing::Channel(Channel::Flow));
            now.estimate.head_residual = Err(Missing::Channel(Channel::Flow));
        }
        let text = show(&machine, 0);
        assert!(text.contains("rev/min - head") && text.contains("efficiency - against curve - "), "{text}");
        assert!(text.ends_with("not compared: no flow reading"), "{text}");
        if let Some(now) = &mut machine.now {
            now.estimate.head_residual = Err(Missing::NotRunning);
        }
        assert!(show(&machine, 0).ends_with("not running"));
    }

    #[test]
    fn the_gravest_thing_comes_first() {
        let mut machine = running();
        machine.active = vec![AlarmKind::EstimateMismatch];
        assert!(show(&machine, 0).ends_with("controller and daemon compute different estimates"));
        machine.active = vec![AlarmKind::SensorFailed(Channel::Flow), AlarmKind::OffCurve];
        machine.cause = Some("worn wear rings".into());
        assert!(show(&machine, 0).ends_with("OFF CURVE: worn wear rings"));
        assert_eq!(show(&machine, 17), "Pump 00:12:34 no data for 17 s; OFF CURVE: worn wear rings");
        machine.active = vec![AlarmKind::SensorFailed(Channel::Flow)];
        assert!(show(&machine, 0).ends_with("sensor alarm: no flow reading"));
    }

    #[test]
    fn silence_is_no_present_state() {
        let mut machine = running();
        assert_eq!(show(&machine, 5), "Pump 00:12:34 no data for 5 s");
        machine.silent_after = 3 * Duration::from_secs(10); // a record every ten seconds
        assert!(show(&machine, 29).ends_with("no alarm") && show(&machine, 30).ends_with("no data for 30 s"));
        machine.silent_after = SILENT;
        machine.now = None;
        assert_eq!(show(&machine, 1), "Pump waiting for the first record");
        assert_eq!(show(&machine, 9), "Pump no data yet, for 9 s");
    }

    #[test]
    fn values_are_rounded_to_their_uncertainty() {
        let show = |value, deviation| {
            let (value, uncertainty) = rounded(value, deviation);
            format!("{value} ±{uncertainty}")
        };
        assert_eq!(show(31.357, 0.08), "31.36 ±0.16");
        assert_eq!(show(31.357, 0.21), "31.4 ±0.4");
        assert_eq!(show(31.357, 0.499), "31.4 ±1.0");
        assert_eq!(show(31.357, 1.4), "31 ±3");
        assert_eq!(show(31.357, 14.0), "31 ±28");
        assert_eq!(show(31.357, 0.0), "31.36 ±0.00");
        assert_eq!(show(31.357, f64::NAN), "31.36 ±NaN");
    }

    #[test]
    fn a_board_takes_what_comes() {
        let board = Board::new(["One", "Two"].map(|name| (name.to_owned(), Duration::from_secs(1))));
        let now = running().now.unwrap();
        board.update(1, 5_000_000, &now.record, &now.estimate, vec![AlarmKind::OffCurve]);
        board.set_cause(1, Some("throttled"));
        board.update(7, 0, &now.record, &now.estimate, Vec::new()); // nobody's place
        let lines = board.lines();
        assert!(lines[0].ends_with("waiting for the first record"), "{lines:?}");
        assert!(lines[1].contains("00:00:00") && lines[1].ends_with("OFF CURVE: throttled"), "{lines:?}");
    }
}
