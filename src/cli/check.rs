//! `darkline check`: every fault of both files at once, or what a scan would do. Touches no instrument.

use std::fmt::Write as _;

use darkline_core::diagnostic::{Diagnostic, Severity};
use darkline_core::itinerary::{self, Extreme, Forecast, Itinerary};
use darkline_core::quantity::{Dimension, display};
use serde_json::json;

use super::Exit;
use super::arguments::CheckOptions;
use super::diagnostics::{self, Files};
use super::output;

/// Runs `check`.
pub fn run(options: &CheckOptions) -> Exit {
    let files = match Files::read(&options.bench, Some(&options.sequence)) {
        Ok(files) => files,
        Err(message) => {
            diagnostics::show_error(&message);
            if options.json {
                output::json(&json!({"ok": false, "error": message, "findings": []}));
            }
            return Exit::WrongFile;
        }
    };
    match plan(&files) {
        Ok(itinerary) => {
            let warnings = itinerary.warnings();
            if options.json {
                output::json(&json!({
                    "ok": true,
                    "title": itinerary.title(),
                    "findings": diagnostics::as_json(&files, warnings),
                    "forecast": itinerary.forecast(),
                }));
            } else {
                diagnostics::show(&files, warnings);
                output::text(&forecast_text(&itinerary));
            }
            Exit::Finished
        }
        Err(findings) => {
            if options.json {
                output::json(&json!({
                    "ok": false,
                    "findings": diagnostics::as_json(&files, &findings),
                }));
            } else {
                diagnostics::show(&files, &findings);
            }
            Exit::WrongFile
        }
    }
}

/// Both files as an itinerary.
///
/// # Errors
/// Every finding of both files.
pub fn plan(files: &Files) -> Result<Itinerary, Vec<Diagnostic>> {
    let sequence = files.sequence.as_ref().map_or("", |(_, text)| text);
    let (_, _, itinerary) = itinerary::check(&files.bench.1, sequence)?;
    debug_assert!(
        itinerary
            .warnings()
            .iter()
            .all(|finding| finding.severity == Severity::Warning)
    );
    Ok(itinerary)
}

/// What a scan would do, as text.
fn forecast_text(itinerary: &Itinerary) -> String {
    let forecast = itinerary.forecast();
    let mut text = String::new();
    let _ = writeln!(text, "{}", itinerary.title());
    let _ = writeln!(
        text,
        "  {} points, {} traces, about {}",
        forecast.points,
        forecast.traces,
        duration(forecast.seconds.total)
    );
    parts(&mut text, &forecast);
    let _ = writeln!(text, "  run.h5 about {}", bytes(forecast.bytes));
    let _ = writeln!(text, "\n  extremes, against their limits");
    for extreme in &forecast.extremes {
        let _ = writeln!(text, "    {}", extreme_text(extreme));
    }
    text
}

fn parts(text: &mut String, forecast: &Forecast) {
    let seconds = &forecast.seconds;
    for (name, value) in [
        ("moving", seconds.moving),
        ("settling", seconds.settling),
        ("sweeping", seconds.sweeping),
        ("transferring", seconds.transferring),
        ("degaussing", seconds.degaussing),
        ("waiting", seconds.waiting),
    ] {
        if value > 0.0 {
            let _ = writeln!(text, "    {name:<13} {}", duration(value));
        }
    }
}

fn extreme_text(extreme: &Extreme) -> String {
    let name = extreme.quantity.as_str();
    if extreme.dimension == Dimension::Switch {
        return format!("{name:<20} switched");
    }
    let range = |low: f64, high: f64| {
        format!(
            "{} .. {}",
            display(low, extreme.dimension),
            display(high, extreme.dimension)
        )
    };
    let reached = range(extreme.lowest, extreme.highest);
    match extreme.limit {
        Some((low, high)) => format!("{name:<20} {reached:<34} limit {}", range(low, high)),
        None => format!("{name:<20} {reached:<34} no limit declared"),
    }
}

/// A time as a person says it: "9.6 s", "12 min 30 s", "7 h 48 min".
pub fn duration(seconds: f64) -> String {
    if seconds < 99.95 {
        return format!("{seconds:.1} s");
    }
    let whole = seconds.round() as u64;
    match whole {
        0..3600 => format!("{} min {} s", whole / 60, whole % 60),
        _ => format!("{} h {} min", whole / 3600, whole % 3600 / 60),
    }
}

/// A size as a person says it: "1.3 MB".
pub fn bytes(count: u64) -> String {
    let mut value = count as f64;
    for unit in ["B", "kB", "MB", "GB"] {
        if value < 999.5 {
            let digits = usize::from(value < 99.5 && unit != "B");
            return format!("{value:.digits$} {unit}");
        }
        value /= 1000.0;
    }
    format!("{value:.1} TB")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn times_and_sizes_read_as_a_person_says_them() {
        assert_eq!(duration(9.62), "9.6 s");
        assert_eq!(duration(750.0), "12 min 30 s");
        assert_eq!(duration(28_080.0), "7 h 48 min");
        assert_eq!(bytes(512), "512 B");
        assert_eq!(bytes(1_349_000), "1.3 MB");
        assert_eq!(bytes(129_000_000_000_000), "129.0 TB");
    }
}
