//! Named faults of the mock bench, as values, as text, and as the `[[fault]]` list of a world file.
//!
//! | text | what happens |
//! |---|---|
//! | `silent:NAME` | what is sent to it is lost, it never answers |
//! | `slow-reply:NAME:PROBABILITY:SECONDS` | replies come late with that probability |
//! | `torn-reply:NAME` | the next reply ends in its middle and the link closes |
//! | `wrong-identity:NAME` | `*IDN?` names another instrument |
//! | `miss-trigger:COUNT` | `scope` does not see the next triggers |
//! | `power-cycle:NAME` | as switched off and on: defaults, output off, ESR bit 7; links stay |
//! | `disconnect:NAME` | its links are closed; new ones are served (serial: what is under way is lost) |
//! | `unreachable:NAME` | its links are closed and new ones are turned away (serial: it is silent) |
//! | `readback-offset:coil:AMPERES` | added to every measured current |
//! | `lock-lost:SECONDS` | the laser is out of lock for so long |
//! | `coil-runaway`, `beam-blocked`, `oven-sensor-open` | see [`crate::world::Fault`] |
//! | `clear:NAME` | all faults of that instrument end |
//!
//! `@SECONDS` behind it says when, since the bench's start (`power-cycle:coil@2.5`); without, at once.

use std::str::FromStr;

use serde::Deserialize;

use crate::bench::NAMES;
use crate::world::Fault as WorldFault;

/// A fault of the bench. Names are those of [`crate::MockBench::names`].
#[derive(Clone, Debug, PartialEq)]
pub enum Fault {
    /// What is sent to it is lost.
    Silent(String),
    /// Replies come late by `delay` seconds with that probability.
    SlowReply {
        /// Instrument.
        name: String,
        /// 0..1, per message.
        probability: f64,
        /// Seconds.
        delay: f64,
    },
    /// The next reply ends in its middle and the link closes.
    TornReply(String),
    /// `*IDN?` names another instrument.
    WrongIdentity(String),
    /// The digitizer does not see that many next triggers.
    MissTrigger(u32),
    /// Off and on again.
    PowerCycle(String),
    /// Links are closed once.
    Disconnect(String),
    /// Links are closed and turned away.
    Unreachable(String),
    /// Added to every measured current, A.
    ReadbackOffset {
        /// Instrument.
        name: String,
        /// A.
        amperes: f64,
    },
    /// The laser is out of lock.
    LockLost {
        /// Seconds.
        duration: f64,
    },
    /// A fault of the world, on or off.
    World(WorldFault, bool),
    /// All faults of the instrument end.
    Clear(String),
}

/// A fault with its time.
#[derive(Clone, Debug, PartialEq)]
pub struct TimedFault {
    /// Seconds since the bench's start; `None` is at once.
    pub at: Option<f64>,
    /// What happens.
    pub fault: Fault,
}

/// A fault's text that cannot be read.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum FaultError {
    /// Not one of the table.
    #[error(
        "fault `{0}` is unknown or has not the parts it needs; see the table in the documentation of the mock's faults"
    )]
    Unknown(String),
    /// The instrument does not exist.
    #[error(
        "fault `{text}` names `{name}`; the mock bench has probe, control, coil, scope, oven and lock"
    )]
    Instrument {
        /// Whole text.
        text: String,
        /// The unknown name.
        name: String,
    },
    /// A number is missing, negative or not finite.
    #[error(
        "fault `{0}` needs a finite number that is not negative (an offset may be) where one stands or is missing"
    )]
    Number(String),
    /// The world file is not TOML, or its list has other keys.
    #[error("world file: {0}")]
    File(String),
}

impl FromStr for TimedFault {
    type Err = FaultError;

    fn from_str(text: &str) -> Result<TimedFault, FaultError> {
        let (what, at) = match text.split_once('@') {
            Some((what, at)) => (what, Some(number(Some(at), text)?)),
            None => (text, None),
        };
        Ok(TimedFault {
            at,
            fault: fault(what.trim(), text)?,
        })
    }
}

#[derive(Deserialize)]
struct WorldFile {
    #[serde(default)]
    fault: Vec<Entry>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Entry {
    what: String,
}

/// The `[[fault]]` list of a world file: tables with one key, `what = "power-cycle:coil@2.5"`.
pub fn faults_of_world_file(text: &str) -> Result<Vec<TimedFault>, FaultError> {
    let file: WorldFile =
        toml::from_str(text).map_err(|error| FaultError::File(error.to_string()))?;
    file.fault.iter().map(|entry| entry.what.parse()).collect()
}

fn fault(what: &str, text: &str) -> Result<Fault, FaultError> {
    let mut parts = what.split(':').map(str::trim);
    let kind = parts.next().unwrap_or_default();
    let mut name = || -> Result<String, FaultError> {
        let name = parts
            .next()
            .ok_or_else(|| FaultError::Unknown(text.to_owned()))?;
        if NAMES.contains(&name) {
            Ok(name.to_owned())
        } else {
            Err(FaultError::Instrument {
                text: text.to_owned(),
                name: name.to_owned(),
            })
        }
    };
    let fault = match kind {
        "silent" => Fault::Silent(name()?),
        "slow-reply" => {
            let name = name()?;
            Fault::SlowReply {
                name,
                probability: number(parts.next(), text)?,
                delay: number(parts.next(), text)?,
            }
        }
        "torn-reply" => Fault::TornReply(name()?),
        "wrong-identity" => Fault::WrongIdentity(name()?),
        "miss-trigger" => Fault::MissTrigger(number(parts.next(), text)? as u32),
        "power-cycle" => Fault::PowerCycle(name()?),
        "disconnect" => Fault::Disconnect(name()?),
        "unreachable" => Fault::Unreachable(name()?),
        "readback-offset" => {
            let name = name()?;
            let amperes = parts
                .next()
                .and_then(|part| part.parse().ok())
                .filter(|value: &f64| value.is_finite());
            Fault::ReadbackOffset {
                name,
                amperes: amperes.ok_or_else(|| FaultError::Number(text.to_owned()))?,
            }
        }
        "lock-lost" => Fault::LockLost {
            duration: number(parts.next(), text)?,
        },
        "clear" => Fault::Clear(name()?),
        other => {
            let world = WorldFault::named(&other.replace('-', " "));
            Fault::World(
                world.ok_or_else(|| FaultError::Unknown(text.to_owned()))?,
                true,
            )
        }
    };
    if parts.next().is_some() {
        Err(FaultError::Unknown(text.to_owned()))
    } else {
        Ok(fault)
    }
}

fn number(part: Option<&str>, text: &str) -> Result<f64, FaultError> {
    let value = part.and_then(|part| part.trim().parse::<f64>().ok());
    value
        .filter(|value| value.is_finite() && *value >= 0.0)
        .ok_or_else(|| FaultError::Number(text.to_owned()))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn every_kind_is_read() {
        let read = |text: &str| text.parse::<TimedFault>().unwrap();
        assert_eq!(
            read("silent:scope"),
            TimedFault {
                at: None,
                fault: Fault::Silent("scope".into())
            }
        );
        assert_eq!(
            read("power-cycle:coil@2.5"),
            TimedFault {
                at: Some(2.5),
                fault: Fault::PowerCycle("coil".into())
            }
        );
        assert_eq!(
            read("slow-reply:scope:0.02:0.3").fault,
            Fault::SlowReply {
                name: "scope".into(),
                probability: 0.02,
                delay: 0.3
            }
        );
        assert_eq!(
            read("readback-offset:coil:-0.005").fault,
            Fault::ReadbackOffset {
                name: "coil".into(),
                amperes: -0.005
            }
        );
        assert_eq!(
            read("lock-lost:0.5@1").fault,
            Fault::LockLost { duration: 0.5 }
        );
        assert_eq!(
            read("coil-runaway").fault,
            Fault::World(WorldFault::CoilRunaway, true)
        );
    }

    #[test]
    fn what_is_wrong_is_said() {
        let wrong = |text: &str| text.parse::<TimedFault>().unwrap_err();
        assert!(matches!(wrong("silent"), FaultError::Unknown(_)));
        assert!(matches!(wrong("mumble:scope"), FaultError::Unknown(_)));
        assert!(matches!(wrong("silent:scope:3"), FaultError::Unknown(_)));
        assert!(matches!(
            wrong("silent:laser"),
            FaultError::Instrument { .. }
        ));
        assert!(matches!(wrong("lock-lost:-1"), FaultError::Number(_)));
        assert!(matches!(wrong("silent:scope@nan"), FaultError::Number(_)));
    }

    #[test]
    fn list_of_a_world_file() {
        let text = "seed = 1\n[[fault]]\nwhat = \"silent:scope@1\"\n[[fault]]\nwhat = \"miss-trigger:2\"\n";
        assert_eq!(faults_of_world_file(text).unwrap().len(), 2);
        assert!(faults_of_world_file("[[fault]]\nwho = \"x\"\n").is_err());
        assert_eq!(faults_of_world_file("seed = 1").unwrap(), []);
    }

    proptest! {
        #[test]
        fn never_panics(text in "[a-z:@0-9.-]{0,40}") {
            let _ = text.parse::<TimedFault>();
        }
    }
}
