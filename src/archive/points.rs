//! The variables along `point` in the root of an archive: coordinates, times, flags, guards, fits.

use darkline_core::bench::Bench;
use darkline_core::channel::Role;
use darkline_core::entry::{Coordinate, Flag, GuardStage, PointRecord};
use darkline_core::itinerary::PointKind;
use darkline_core::quantity::{self, QuantityName, Setting};
use hdf5_metno::Error;

use super::netcdf::{Dimension, NetcdfFile, Rows};
use super::survey::{Quantity, Survey};
use super::{Names, fit_values};

/// Every flag in the order of its bit.
const FLAGS: [Flag; 10] = [
    Flag::Unsettled,
    Flag::GuardOut,
    Flag::OutOfLock,
    Flag::Clipped,
    Flag::NoPeak,
    Flag::Unfitted,
    Flag::MissedTrigger,
    Flag::Suspended,
    Flag::Reconnected,
    Flag::Retried,
];

/// Unit and calendar of all times.
pub const TIME: [(&str, &str); 2] = [
    ("units", "nanoseconds since 1970-01-01 00:00:00"),
    ("calendar", "proleptic_gregorian"),
];

/// A variable along `point` and how its value is found in a point's record.
struct Number {
    rows: Rows<f64>,
    source: Source,
}

enum Source {
    Setpoint(String),
    Readback(String),
    Measured(String),
    GuardLowest(u32, String, GuardStage),
    GuardHighest(u32, String, GuardStage),
    Fit(String),
    SweepCentre,
}

/// The variables along `point`, being filled.
pub struct Points {
    point: Rows<i64>,
    begun: Rows<i64>,
    ended: Rows<i64>,
    kind: Rows<i8>,
    which: Rows<i32>,
    flags: Rows<i32>,
    attempts: Rows<i32>,
    acquisitions: Rows<i32>,
    grid: Option<Rows<i32>>,
    numbers: Vec<Number>,
}

impl Points {
    /// Lay them out. Returns the dimension `point` as well.
    pub fn lay_out(
        file: &mut NetcdfFile,
        survey: &Survey,
        names: &mut Names,
    ) -> Result<(Self, Dimension), Error> {
        let root = file.root().clone();
        let (dimension, point) = file.coordinate::<i64>(&root, "point", survey.points)?;
        point.describe(&[("long_name", "index of the point in the itinerary")])?;
        let along = [&dimension];
        let time = |file: &NetcdfFile, name: &str, long_name| -> Result<Rows<i64>, Error> {
            let rows = file.variable(&root, name, &along, 0i64)?;
            rows.describe(&[("long_name", long_name)])?;
            rows.describe(&TIME)?;
            Ok(rows)
        };
        let count = |file: &NetcdfFile, name: &str, long_name| -> Result<Rows<i32>, Error> {
            let rows = file.variable(&root, name, &along, 0i32)?;
            rows.describe(&[("long_name", long_name)])?;
            Ok(rows)
        };
        let begun = time(file, "begun", "time when the first move to the point began")?;
        let ended = time(file, "ended", "time when the last sample was taken")?;
        let kind = lay_out_kind(file, &dimension)?;
        let which = count(
            file,
            "which",
            "which reference or background of the sequence, from 0; 0 for a point of the grid",
        )?;
        let flags = lay_out_flags(file, &dimension)?;
        let attempts = count(
            file,
            "attempts",
            "times that the point was recorded, the last one kept",
        )?;
        let acquisitions = count(file, "acquisition_count", "acquisitions in the trace")?;
        let grid = match survey.steps {
            0 => None,
            steps => Some(lay_out_grid(file, &dimension, steps)?),
        };
        let numbers = lay_out_numbers(file, survey, names, &dimension)?;
        let points = Self {
            point,
            begun,
            ended,
            kind,
            which,
            flags,
            attempts,
            acquisitions,
            grid,
            numbers,
        };
        Ok((points, dimension))
    }

    /// Put the next point.
    pub fn put(&mut self, record: &PointRecord) -> Result<(), Error> {
        self.point.put(record.index.cast_signed())?;
        self.begun.put(record.begun)?;
        self.ended.put(record.ended)?;
        let (kind, which) = match &record.kind {
            PointKind::Grid { .. } => (0, 0),
            PointKind::Reference { which } => (1, *which),
            PointKind::Background { which } => (2, *which),
        };
        self.kind.put(kind)?;
        self.which.put(which as i32)?;
        self.flags.put(mask(&record.flags))?;
        self.attempts.put(record.attempts.cast_signed())?;
        self.acquisitions.put(record.acquisitions.cast_signed())?;
        if let Some(grid) = &mut self.grid {
            let indices = record.grid().unwrap_or_default();
            for (place, index) in grid.row()?.iter_mut().zip(indices) {
                *place = i32::try_from(*index).unwrap_or(i32::MAX);
            }
        }
        let fit = fit_values(record);
        for number in &mut self.numbers {
            let value = number.source.of(record, &fit);
            number.rows.put(value.unwrap_or(f64::NAN))?;
        }
        Ok(())
    }

    /// Write what is left.
    pub fn finish(self) -> Result<(), Error> {
        for rows in [self.point, self.begun, self.ended] {
            rows.finish()?;
        }
        self.kind.finish()?;
        for rows in [self.which, self.flags, self.attempts, self.acquisitions]
            .into_iter()
            .chain(self.grid)
        {
            rows.finish()?;
        }
        for number in self.numbers {
            number.rows.finish()?;
        }
        Ok(())
    }
}

impl Source {
    fn of(&self, record: &PointRecord, fit: &[(String, f64)]) -> Option<f64> {
        let guard = |number: u32, what: &str, stage: GuardStage| {
            record.guards.iter().rfind(|reading| {
                reading.guard == number && reading.what == what && reading.stage == stage
            })
        };
        match self {
            Self::Setpoint(name) => record.coordinate(name).and_then(setpoint),
            Self::Readback(name) => record.coordinate(name)?.readback,
            Self::Measured(name) => record.coordinate(name)?.measured,
            Self::GuardLowest(number, what, stage) => guard(*number, what, *stage)?.lowest,
            Self::GuardHighest(number, what, stage) => guard(*number, what, *stage)?.highest,
            Self::Fit(name) => fit
                .iter()
                .find(|(known, _)| known == name)
                .map(|(_, value)| *value),
            Self::SweepCentre => (record.sweep_centre != 0.0).then_some(record.sweep_centre),
        }
    }
}

fn setpoint(coordinate: &Coordinate) -> Option<f64> {
    match coordinate.setpoint {
        Setting::Number(value) => Some(value),
        Setting::Switch(on) => Some(f64::from(u8::from(on))),
    }
}

fn mask(flags: &[Flag]) -> i32 {
    FLAGS
        .iter()
        .enumerate()
        .filter(|(_, flag)| flags.contains(flag))
        .map(|(bit, _)| 1 << bit)
        .sum()
}

fn lay_out_kind(file: &NetcdfFile, along: &Dimension) -> Result<Rows<i8>, Error> {
    let rows = file.variable(file.root(), "point_kind", &[along], 0i8)?;
    rows.describe(&[
        ("long_name", "what the point is for"),
        ("flag_meanings", "grid reference background"),
    ])?;
    rows.number("flag_values", &[0i8, 1, 2])?;
    Ok(rows)
}

fn lay_out_flags(file: &NetcdfFile, along: &Dimension) -> Result<Rows<i32>, Error> {
    let rows = file.variable(file.root(), "flags", &[along], 0i32)?;
    let meanings: Vec<String> = FLAGS
        .iter()
        .map(|flag| flag.word().replace(' ', "_"))
        .collect();
    rows.describe(&[
        ("long_name", "doubts about the point, one bit each"),
        ("flag_meanings", &meanings.join(" ")),
    ])?;
    let masks: Vec<i32> = (0..FLAGS.len()).map(|bit| 1 << bit).collect();
    rows.number("flag_masks", &masks)?;
    Ok(rows)
}

fn lay_out_grid(
    file: &mut NetcdfFile,
    along: &Dimension,
    steps: usize,
) -> Result<Rows<i32>, Error> {
    let root = file.root().clone();
    let step = file.dimension(&root, "step", steps)?;
    let rows = file.variable(&root, "grid", &[along, &step], -1i32)?;
    rows.describe(&[(
        "long_name",
        "index along each step of the sequence, outermost first; missing for references and backgrounds",
    )])?;
    rows.declare_fill()?;
    Ok(rows)
}

fn lay_out_numbers(
    file: &NetcdfFile,
    survey: &Survey,
    names: &mut Names,
    along: &Dimension,
) -> Result<Vec<Number>, Error> {
    let mut numbers = Vec::new();
    let mut add = |name: String, long_name: &str, unit: &str, source| -> Result<(), Error> {
        let rows = file.variable(file.root(), &names.free(&name), &[along], f64::NAN)?;
        rows.describe(&[("long_name", long_name), ("units", unit)])?;
        rows.declare_fill()?;
        numbers.push(Number { rows, source });
        Ok(())
    };
    add(
        "sweep_centre".into(),
        "middle of the sweep's window",
        "Hz",
        Source::SweepCentre,
    )?;
    let bench = Bench::parse(&survey.header.bench).ok();
    let unit_of = |quantity: &str| unit_of(bench.as_ref(), quantity);
    for quantity in &survey.quantities {
        let Quantity { name, switch } = quantity;
        let unit = if *switch { "1" } else { unit_of(name) };
        add(
            format!("{name}_setpoint"),
            &match switch {
                true => format!("{name}: what was asked for, 1 for on"),
                false => format!("{name}: what was asked for"),
            },
            unit,
            Source::Setpoint(name.clone()),
        )?;
        add(
            format!("{name}_readback"),
            &format!("{name}: what the instrument said it was set to"),
            unit,
            Source::Readback(name.clone()),
        )?;
        add(
            format!("{name}_measured"),
            &format!("{name}: what the instrument measured"),
            unit,
            Source::Measured(name.clone()),
        )?;
    }
    for (number, what, stage) in &survey.guards {
        let when = match stage {
            GuardStage::Before => "before",
            GuardStage::During => "during",
            GuardStage::After => "after",
        };
        let source = |lowest: bool| match lowest {
            true => Source::GuardLowest(*number, what.clone(), *stage),
            false => Source::GuardHighest(*number, what.clone(), *stage),
        };
        for (end, lowest) in [("lowest", true), ("highest", false)] {
            add(
                format!("guard_{number}_{what}_{when}_{end}"),
                &format!("guard {number}: {end} {what} seen {when} the recording"),
                match stage {
                    // A recorded signal is what the digitizer saw: volts.
                    GuardStage::During => "V",
                    GuardStage::Before | GuardStage::After => unit_of(what),
                },
                source(lowest),
            )?;
        }
    }
    for name in &survey.fit {
        add(
            format!("line_{name}"),
            &format!("fit of the point's trace: {}", name.replace('_', " ")),
            fit_unit(name),
            Source::Fit(name.clone()),
        )?;
    }
    Ok(numbers)
}

/// SI unit of a quantity: as the run's bench file declares it, or else by what the roles offer. Empty where
/// neither tells it.
fn unit_of(bench: Option<&Bench>, quantity: &str) -> &'static str {
    let declared = QuantityName::new(quantity)
        .ok()
        .and_then(|name| Some(bench?.property(&name)?.dimension));
    let property = quantity.rsplit('.').next().unwrap_or(quantity);
    let offered = || {
        let offers = Role::ALL.iter().flat_map(|role| role.offers());
        let found = offers.into_iter().find(|offer| offer.property == property);
        found.map(|offer| offer.dimension)
    };
    declared.or_else(offered).map_or("", si_unit)
}

fn si_unit(dimension: quantity::Dimension) -> &'static str {
    use quantity::Dimension as Is;
    match dimension {
        Is::Current => "A",
        Is::Frequency => "Hz",
        Is::Temperature => "K",
        Is::Voltage => "V",
        Is::Level => "dBm",
        Is::Power => "W",
        Is::Field => "T",
        Is::Time => "s",
        Is::Switch => "1",
        _ => "",
    }
}

/// Unit of a number of a fit by its name; empty where it is a ratio, a count or not known here.
fn fit_unit(name: &str) -> &'static str {
    let what = name.strip_suffix("_sigma").unwrap_or(name);
    match what {
        "centre" | "fwhm" => "Hz",
        "height" | "base" | "noise" => "V",
        "slope" => "V Hz-1",
        "phase" => "rad",
        _ => "",
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_flag_has_a_bit_of_its_own() {
        let all = mask(&FLAGS);
        assert_eq!(all, (1 << FLAGS.len()) - 1);
        assert_eq!(mask(&[Flag::Clipped, Flag::Unsettled]), 0b1001);
        // The compiler tells when a flag is added here and not above.
        for flag in FLAGS {
            match flag {
                Flag::Unsettled
                | Flag::GuardOut
                | Flag::OutOfLock
                | Flag::Clipped
                | Flag::NoPeak
                | Flag::Unfitted
                | Flag::MissedTrigger
                | Flag::Suspended
                | Flag::Reconnected
                | Flag::Retried => {}
            }
        }
    }

    #[test]
    fn quantities_have_their_units() {
        let bench = Bench::parse(include_str!("../../mock/bench.toml")).unwrap();
        for (quantity, unit) in [
            ("coil.current", "A"),
            ("lock.level", "V"),
            ("probe.power", "dBm"),
            ("oven.temperature", "K"),
            ("magnetometer.x", ""),
        ] {
            assert_eq!(unit_of(Some(&bench), quantity), unit, "{quantity}");
        }
        assert_eq!(unit_of(None, "coil.current"), "A");
    }
}
