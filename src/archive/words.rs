//! An entry in words, one line, for who reads an archive without this program. Never more than a few hundred bytes.

use darkline_core::entry::{EntryKind, GuardReading, PointRecord, SafeLevel};
use darkline_core::itinerary::PointKind;
use darkline_core::quantity::Setting;

use super::netcdf::cut;

/// Longest line, bytes; longer ones are cut and end in "...".
const LONGEST: usize = 400;

/// The entry's kind in one word.
pub fn kind(kind: &EntryKind) -> &'static str {
    match kind {
        EntryKind::Opened(_) => "opened",
        EntryKind::Identified { .. } => "identified",
        EntryKind::Granted { .. } => "granted",
        EntryKind::Degaussed { .. } => "degaussed",
        EntryKind::Turned { .. } => "turned",
        EntryKind::Point(_) => "point",
        EntryKind::Repeated { .. } => "repeated",
        EntryKind::Guard { .. } => "guard",
        EntryKind::Interlock { .. } => "interlock",
        EntryKind::Reconnected { .. } => "reconnected",
        EntryKind::Faulted(_) => "faulted",
        EntryKind::Note { .. } => "note",
        EntryKind::LeftSafe { .. } => "left-safe",
        EntryKind::Answered(_) => "answered",
        EntryKind::Closed { .. } => "closed",
    }
}

/// The entry in words.
pub fn words(kind: &EntryKind) -> String {
    let line = match kind {
        EntryKind::Opened(header) => format!(
            "run opened: {}, {} points, version {}",
            header.title, header.points, header.version
        ),
        EntryKind::Identified {
            instrument,
            identity,
            ..
        } => format!("`{instrument}` is {identity}"),
        EntryKind::Granted {
            instrument,
            setting,
            asked,
            granted,
            unit,
        } => {
            format!("`{instrument}` {setting}: asked for {asked} {unit}, granted {granted} {unit}")
        }
        EntryKind::Degaussed {
            quantity,
            amplitude,
            setpoints,
        } => format!("degaussed through {quantity}: {setpoints} setpoints from {amplitude} A"),
        EntryKind::Turned { state, reason } => format!("{state}: {reason}"),
        EntryKind::Point(point) => point_words(point),
        EntryKind::Repeated {
            point,
            attempt,
            reason,
        } => format!(
            "point {point}, attempt {attempt} in vain: {}",
            reason.flag().word()
        ),
        EntryKind::Guard { point, reading } => {
            format!("point {point}, guard {}", guard_words(reading))
        }
        EntryKind::Interlock {
            quantity,
            value,
            say,
            ..
        } => match value {
            Some(value) => format!("interlock tripped: {quantity} at {value}. {say}"),
            None => format!("interlock tripped: {quantity} cannot be read. {say}"),
        },
        EntryKind::Reconnected { instrument } => format!("`{instrument}` answers again"),
        EntryKind::Faulted(fault) => format!("{}: {}", fault.code, fault.message),
        EntryKind::Note { text } => text.clone(),
        EntryKind::LeftSafe {
            level, unreached, ..
        } => {
            let level = match level {
                SafeLevel::Rest => "at rest",
                SafeLevel::Safe => "safe",
            };
            match unreached.as_slice() {
                [] => format!("bench {level}, verified by readback"),
                faults => format!(
                    "bench may NOT be {level}: {}",
                    faults
                        .iter()
                        .map(|fault| fault.message.as_str())
                        .collect::<Vec<_>>()
                        .join("; ")
                ),
            }
        }
        EntryKind::Answered(_) => "answered".to_owned(),
        EntryKind::Closed { state, reason } => format!("run {state}: {reason}"),
    };
    one_line(line)
}

fn point_words(point: &PointRecord) -> String {
    let mut line = match &point.kind {
        PointKind::Grid { .. } => format!("point {}", point.index),
        PointKind::Reference { which } => format!("point {}, reference {which}", point.index),
        PointKind::Background { which } => format!("point {}, background {which}", point.index),
    };
    for coordinate in &point.coordinates {
        line += &match coordinate.setpoint {
            Setting::Number(value) => format!(", {} = {value}", coordinate.quantity),
            Setting::Switch(true) => format!(", {} on", coordinate.quantity),
            Setting::Switch(false) => format!(", {} off", coordinate.quantity),
        };
    }
    for flag in &point.flags {
        line += ", ";
        line += flag.word();
    }
    line
}

fn guard_words(reading: &GuardReading) -> String {
    let state = if reading.good { "back" } else { "out" };
    match (reading.lowest, reading.highest) {
        (Some(lowest), Some(highest)) => {
            format!("{} {state}: {lowest} to {highest}", reading.what)
        }
        _ => format!("{} {state}: not read", reading.what),
    }
}

fn one_line(mut line: String) -> String {
    if line.contains(['\n', '\r', '\0']) {
        line = line.replace(['\n', '\r', '\0'], " ");
    }
    if line.len() > LONGEST {
        line.truncate(cut(&line, LONGEST - 3).len());
        line += "...";
    }
    line
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn words_are_one_short_line() {
        let text = "ä\n".repeat(1000);
        let line = words(&EntryKind::Note { text });
        assert!(line.len() <= LONGEST && !line.contains('\n'));
        assert!(line.ends_with("..."));
    }
}
