//! The limits of one instrument, as its mailbox enforces them whoever asks, and the stairs of a ramp.

use std::time::Duration;

use darkline_core::bench::{Instrument, Property};
use darkline_core::channel::Access;
use darkline_core::diagnostic::Fault;
use darkline_core::quantity::{Setting, display};
use darkline_drivers::role::FrequencySweep;

/// The property of that name, if it may be set to this.
///
/// # Errors
/// Where the bench has no such property, it is only read, the setting is of the wrong sort, is no
/// number, or is out of the property's range.
pub fn permit<'a>(
    instrument: &'a Instrument,
    property: &str,
    to: Setting,
) -> Result<&'a Property, Fault> {
    let name = &instrument.name;
    let Some(found) = instrument.properties.get(property) else {
        return Err(Fault::new("F0310", format!("`{name}` has no `{property}`"))
            .help("declare it in bench.toml")
            .of(name));
    };
    if found.access == Access::ReadOnly {
        return Err(
            Fault::new("F0311", format!("{property} of `{name}` can only be read")).of(name),
        );
    }
    match (to, found.range) {
        (Setting::Switch(_), None) => Ok(found),
        (Setting::Number(value), Some(range)) => {
            within(name, found, property, value, range).map(|()| found)
        }
        (Setting::Number(_), None) => Err(Fault::new(
            "F0312",
            format!("{property} of `{name}` is a switch or has no range; a number cannot be set"),
        )
        .help("give it a `range` in bench.toml")
        .of(name)),
        (Setting::Switch(_), Some(_)) => Err(Fault::new(
            "F0312",
            format!("{property} of `{name}` is a number; it cannot be switched"),
        )
        .of(name)),
    }
}

/// Both ends of a sweep within the range of the generator's frequency.
///
/// # Errors
/// Where an end is out of it.
pub fn permit_sweep(instrument: &Instrument, sweep: &FrequencySweep) -> Result<(), Fault> {
    for end in [sweep.start, sweep.stop] {
        permit(instrument, "frequency", Setting::Number(end))?;
    }
    Ok(())
}

/// A readback within the property's range, a readback's resolution apart.
///
/// # Errors
/// Where it is out: the instrument stands where it must not.
pub fn judge_readback(instrument: &Instrument, property: &str, readback: f64) -> Result<(), Fault> {
    let Some(found) = instrument.properties.get(property) else {
        return Ok(());
    };
    let Some((lowest, highest)) = found.range else {
        return Ok(());
    };
    let slack = tolerance(found);
    if readback >= lowest - slack && readback <= highest + slack {
        return Ok(());
    }
    let name = &instrument.name;
    let limit = if readback > highest { highest } else { lowest };
    Err(Fault::new(
        "F0313",
        format!(
            "`{name}` reads back {property} as {}, past the {} limit",
            display(readback, found.dimension),
            display(limit, found.dimension),
        ),
    )
    .help("find out who set it; its front panel may be in local control")
    .of(name))
}

/// How far a readback may be from what was set without being another value.
pub fn tolerance(property: &Property) -> f64 {
    let width = property
        .range
        .map_or(0.0, |(lowest, highest)| highest - lowest);
    property.resolution.unwrap_or(0.0).max(1e-6 * width)
}

fn within(
    instrument: &str,
    found: &Property,
    property: &str,
    value: f64,
    (lowest, highest): (f64, f64),
) -> Result<(), Fault> {
    if value >= lowest && value <= highest {
        return Ok(());
    }
    let (verb, limit, remedy) = if value < lowest {
        ("is below", lowest, "raise `from`")
    } else {
        ("exceeds", highest, "lower `to`")
    };
    Err(Fault::new(
        "F0314",
        format!(
            "{property} {} {verb} the {} limit of `{instrument}`",
            display(value, found.dimension),
            display(limit, found.dimension),
        ),
    )
    .help(format!("{remedy} or change the limit in bench.toml"))
    .of(instrument))
}

/// The setpoints of a ramp, the last of them exactly `to`, and the time between two of them.
///
/// With stairs of equal height s, each so long after the one before it is done, the change over any
/// 100 ms is at most slew x 100 ms + s, and s is at most the ramp step.
pub fn stairs(property: &Property, from: f64, to: f64) -> (Vec<f64>, Duration) {
    let way = to - from;
    let (Some(slew), true) = (property.slew, way != 0.0 && way.is_finite()) else {
        return (vec![to], Duration::ZERO);
    };
    // Without a declared step, one that takes 10 ms.
    let step = property.ramp_step.unwrap_or(slew * 0.01);
    let count = (way.abs() / step).ceil().max(1.0);
    let stairs = (1..=count as u64)
        .map(|nth| {
            if nth as f64 == count {
                to
            } else {
                from + way * (nth as f64 / count)
            }
        })
        .collect();
    let pause = Duration::try_from_secs_f64(way.abs() / count / slew).unwrap_or(Duration::MAX / 4);
    (stairs, pause)
}

#[cfg(test)]
mod tests {
    use std::collections::BTreeMap;

    use darkline_core::channel::Role;
    use darkline_core::quantity::{Dimension, QuantityName};

    use super::*;

    fn property() -> Property {
        Property {
            name: QuantityName::new("coil.current").unwrap(),
            dimension: Dimension::Current,
            access: Access::Settable,
            range: Some((-25e-3, 25e-3)),
            slew: Some(0.1),
            ramp_step: Some(0.5e-3),
            rest: None,
            safe: None,
            resolution: Some(1e-6),
            accuracy: None,
        }
    }

    fn coil() -> Instrument {
        Instrument {
            name: "coil".into(),
            role: Role::CurrentSupply,
            map: String::new(),
            link: String::new(),
            identity: None,
            properties: BTreeMap::from([("current".to_owned(), property())]),
            channels: BTreeMap::new(),
            polarity: None,
            amplifier: 0.0,
            modulator_limit: None,
        }
    }

    #[test]
    fn a_value_past_a_limit_is_refused_in_the_words_of_the_bench() {
        let fault = permit(&coil(), "current", Setting::Number(32e-3)).unwrap_err();
        assert_eq!(
            fault.message,
            "current 32 mA exceeds the 25 mA limit of `coil`"
        );
        assert_eq!(
            fault.help.as_deref(),
            Some("lower `to` or change the limit in bench.toml")
        );
        for bad in [f64::NAN, f64::INFINITY, -25.0001e-3] {
            assert!(permit(&coil(), "current", Setting::Number(bad)).is_err());
        }
        assert!(permit(&coil(), "current", Setting::Number(25e-3)).is_ok());
        assert!(permit(&coil(), "current", Setting::Switch(true)).is_err());
        assert!(permit(&coil(), "voltage", Setting::Number(0.0)).is_err());
    }

    #[test]
    fn a_readback_past_a_limit_is_a_fault() {
        assert!(judge_readback(&coil(), "current", 25e-3 + 0.9e-6).is_ok());
        let fault = judge_readback(&coil(), "current", 0.032).unwrap_err();
        assert!(
            fault.message.contains("32 mA, past the 25 mA limit"),
            "{fault}"
        );
        assert!(judge_readback(&coil(), "current", f64::NAN).is_err());
    }

    #[test]
    fn stairs_are_no_higher_than_a_step_and_end_exactly() {
        for to in [20e-3, -20e-3, 1e-3, 0.3e-3, 1.23456789e-3] {
            let (stairs, pause) = stairs(&property(), 0.0, to);
            assert_eq!(stairs.last(), Some(&to));
            let mut last = 0.0;
            for stair in &stairs {
                let height: f64 = stair - last;
                assert!(height.abs() <= 0.5e-3 * (1.0 + 1e-9));
                // No faster than the slew allows.
                assert!(height.abs() <= 0.1 * pause.as_secs_f64() * (1.0 + 1e-6));
                last = *stair;
            }
        }
        assert_eq!(stairs(&property(), 1e-3, 1e-3).0, vec![1e-3]);
    }
}
