//! How far the work is: a bar with rate and time left on a terminal, plain lines elsewhere, nothing when silent.
//!
//! All of it goes to standard error. A line that cannot be written is dropped: progress is no reason to fail.

use indicatif::{MultiProgress, ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::fmt::Write as _;
use std::io::{IsTerminal, Write};
use std::sync::Mutex;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::{Duration, Instant};

/// Off a terminal, time between two lines about one stage.
const LINE_EVERY: Duration = Duration::from_secs(10);

/// Reports stages of work.
#[derive(Debug)]
pub struct Progress {
    way: Way,
}

#[derive(Debug)]
enum Way {
    Bars(MultiProgress),
    Lines,
    Silent,
}

/// One stage under way. Shared between threads by reference.
#[derive(Debug)]
pub struct Stage<'p> {
    progress: &'p Progress,
    name: &'static str,
    unit: &'static str,
    total: Option<u64>,
    done: AtomicU64,
    started: Instant,
    last_line: Mutex<Instant>,
    bar: Option<ProgressBar>,
}

impl Progress {
    /// Silent, or as standard error wants it: bars on a terminal, lines elsewhere.
    pub fn new(silent: bool) -> Self {
        let way = if silent {
            Way::Silent
        } else if std::io::stderr().is_terminal() {
            Way::Bars(MultiProgress::with_draw_target(ProgressDrawTarget::stderr()))
        } else {
            Way::Lines
        };
        Progress { way }
    }

    /// Starts a stage of `total` units of work, when it is known how many.
    pub fn stage(&self, name: &'static str, unit: &'static str, total: Option<u64>) -> Stage<'_> {
        let bar = match &self.way {
            Way::Bars(bars) => {
                let bar = bars.add(total.map_or_else(ProgressBar::new_spinner, ProgressBar::new));
                bar.set_style(style(unit, total.is_some()));
                bar.set_message(name);
                bar.enable_steady_tick(Duration::from_millis(200));
                Some(bar)
            }
            Way::Lines => {
                print_line(&format!("{name} …"));
                None
            }
            Way::Silent => None,
        };
        let (started, done) = (Instant::now(), AtomicU64::new(0));
        Stage { progress: self, name, unit, total, done, started, last_line: Mutex::new(started), bar }
    }

    /// A sentence for the person, above any bars; silent when progress is.
    pub fn note(&self, sentence: &str) {
        if !matches!(self.way, Way::Silent) {
            self.print(sentence);
        }
    }

    /// A sentence that must be seen: shown even when progress is silent.
    pub fn warn(&self, sentence: &str) {
        self.print(&format!("warning: {sentence}"));
    }

    fn print(&self, line: &str) {
        match &self.way {
            Way::Bars(bars) => bars.suspend(|| print_line(line)),
            Way::Lines | Way::Silent => print_line(line),
        }
    }
}

impl Stage<'_> {
    /// Adds to the work done.
    pub fn add(&self, units: u64) {
        let done = self.done.fetch_add(units, Ordering::Relaxed) + units;
        if let Some(bar) = &self.bar {
            bar.set_position(done);
        } else if matches!(self.progress.way, Way::Lines) {
            // a thread that finds another one printing has nothing to add
            if let Ok(mut last) = self.last_line.try_lock()
                && last.elapsed() >= LINE_EVERY
            {
                *last = Instant::now();
                print_line(&under_way(self.name, self.unit, done, self.total, self.started.elapsed()));
            }
        }
    }

    /// Ends the stage, and leaves one line about it.
    pub fn finish(self) {
        if let Some(bar) = &self.bar {
            bar.finish_and_clear();
        }
        let done = self.done.load(Ordering::Relaxed);
        self.progress.note(&ended(self.name, self.unit, done, self.started.elapsed()));
    }
}

impl Drop for Stage<'_> {
    fn drop(&mut self) {
        // a stage left early, by an error, must not leave its bar below the reason
        if let Some(bar) = &self.bar {
            bar.finish_and_clear();
        }
    }
}

fn style(unit: &'static str, known_total: bool) -> ProgressStyle {
    let per_second = move |state: &indicatif::ProgressState, out: &mut dyn std::fmt::Write| {
        let _ = write!(out, "{} {unit}/s", short(state.per_sec()));
    };
    let template = if known_total {
        "{msg:<24} {bar:30} {percent:>3} %  {rate}  {eta} left"
    } else {
        "{msg:<24} {spinner} {human_pos}  {rate}  {elapsed}"
    };
    let style = ProgressStyle::with_template(template).unwrap_or_else(|_| ProgressStyle::default_bar());
    style.with_key("rate", per_second)
}

fn under_way(name: &str, unit: &str, done: u64, total: Option<u64>, elapsed: Duration) -> String {
    let rate = done as f64 / elapsed.as_secs_f64();
    let mut line = match total {
        Some(total) if total > 0 => format!("{name}: {:.0} %", 100.0 * done as f64 / total as f64),
        _ => format!("{name}: {} {unit}", short(done as f64)),
    };
    let _ = write!(line, ", {} {unit}/s", short(rate));
    if let Some(left) = total.and_then(|total| total.checked_sub(done)).filter(|_| rate > 0.0) {
        let _ = write!(line, ", {:.0} s left", left as f64 / rate);
    }
    line
}

fn ended(name: &str, unit: &str, done: u64, elapsed: Duration) -> String {
    let seconds = elapsed.as_secs_f64();
    if done == 0 {
        return format!("{name}: {seconds:.1} s");
    }
    let rate = short(done as f64 / seconds.max(1e-9));
    format!("{name}: {} {unit} in {seconds:.1} s ({rate} {unit}/s)", short(done as f64))
}

/// A count to three digits.
fn short(value: f64) -> String {
    let (scaled, suffix) = match value {
        v if v >= 999.5e9 => return format!("{v:.2e}"),
        v if v >= 999.5e6 => (v / 1e9, " billion"),
        v if v >= 999.5e3 => (v / 1e6, " million"),
        v if v >= 10_000.0 => (v / 1e3, " thousand"),
        v => (v, ""),
    };
    let whole = value.fract() == 0.0 && suffix.is_empty();
    match scaled {
        s if whole || s >= 99.95 => format!("{s:.0}{suffix}"),
        s if s >= 9.995 => format!("{s:.1}{suffix}"),
        s => format!("{s:.2}{suffix}"),
    }
}

fn print_line(line: &str) {
    let _ = writeln!(std::io::stderr().lock(), "{line}");
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn counts_are_short() {
        for (value, want) in [
            (0.0, "0"),
            (7.0, "7"),
            (0.314159, "0.31"),
            (1234.0, "1234"),
            (12_345.0, "12.3 thousand"),
            (1_234_567.0, "1.23 million"),
            (999_600.0, "1.00 million"),
            (4.5e9, "4.50 billion"),
            (2e12, "2.00e12"),
        ] {
            assert_eq!(short(value), want);
        }
    }

    #[test]
    fn a_line_says_share_rate_and_time_left() {
        let line = under_way("gridding", "visibilities", 250, Some(1000), Duration::from_secs(5));
        assert_eq!(line, "gridding: 25 %, 50 visibilities/s, 15 s left");
        let line = under_way("reading", "rows", 20_000, None, Duration::from_secs(10));
        assert_eq!(line, "reading: 20.0 thousand rows, 2000 rows/s");
        assert_eq!(ended("kernels", "kernels", 0, Duration::from_millis(1500)), "kernels: 1.5 s");
    }

    #[test]
    fn the_bar_templates_are_good() {
        for template in ["{msg:<24} {bar:30} {percent:>3} %  {rate}  {eta} left", "{msg:<24} {spinner} {human_pos}"]
        {
            assert!(ProgressStyle::with_template(template).is_ok());
        }
    }
}
