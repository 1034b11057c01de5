//! The samples in an archive: averaged traces with their standard errors in the root, and every acquisition as
//! received in the group `acquisitions`.

use darkline_core::trace::{Acquisition, ChannelData, Codes, Direction, Trace};
use hdf5_metno::{Dataset, Error};

use super::Names;
use super::codes::ChannelRows;
use super::netcdf::{Dimension, NetcdfFile, Rows, put_text};
use super::points::TIME;
use super::survey::{Channel, Survey};

/// The variables of all samples, being filled.
pub struct Traces {
    directions: Vec<Direction>,
    repeats: usize,
    samples: usize,
    zero: f64,
    detuning: Rows<f64>,
    averages: Vec<Average>,
    axis: Vec<Rows<f64>>,
    steps: Rows<i32>,
    begun: Rows<i64>,
    channels: Vec<ChannelRows>,
}

/// Mean and standard error of one channel.
struct Average {
    mean: Wide,
    error: Rows<f32>,
}

/// Means of 16-bit codes fit in 32 bits, those of wider ones do not.
enum Wide {
    F32(Rows<f32>),
    F64(Rows<f64>),
}

const AXIS: [(&str, &str, &str); 5] = [
    (
        "axis_start",
        "Hz",
        "frequency at the beginning of the sweep",
    ),
    ("axis_stop", "Hz", "frequency at the end of the sweep"),
    ("axis_duration", "s", "length of the sweep"),
    (
        "axis_delay",
        "s",
        "time of sample 0 after the beginning of the sweep",
    ),
    ("axis_interval", "s", "time between samples"),
];

impl Traces {
    /// Lay them out along `point`.
    pub fn lay_out(
        file: &mut NetcdfFile,
        survey: &Survey,
        names: &mut Names,
        point: &Dimension,
    ) -> Result<Self, Error> {
        let root = file.root().clone();
        let directions: Vec<Direction> = survey.directions.iter().copied().collect();
        let direction = lay_out_directions(file, &directions)?;
        let sample = file.dimension(&root, "sample", survey.samples)?;
        let along = [point, &direction, &sample];
        let zero = survey.zero.unwrap_or(0.0);
        put_zero(&file.scalar(&root, "detuning_zero", zero)?)?;
        let detuning = file.variable(&root, "detuning", &along, f64::NAN)?;
        detuning.describe(&[
            (
                "long_name",
                "frequency of the sweep while the sample was taken, less detuning_zero",
            ),
            ("units", "Hz"),
        ])?;
        detuning.declare_fill()?;
        let averages = survey
            .channels
            .iter()
            .map(|channel| Average::lay_out(file, channel, names, &along))
            .collect::<Result<_, _>>()?;

        let group = file.group("acquisitions")?;
        put_text(
            &group,
            "comment",
            "every acquisition as received: value = code * scale + offset; the missing value stands where there is none",
        )?;
        let repeat = file.dimension(&group, "repeat", survey.repeats)?;
        let cells = [point, &direction, &repeat];
        let axis = AXIS
            .iter()
            .map(|(name, unit, long_name)| {
                let rows = file.variable(&group, name, &cells, f64::NAN)?;
                rows.describe(&[("long_name", long_name), ("units", unit)])?;
                rows.declare_fill()?;
                Ok(rows)
            })
            .collect::<Result<_, Error>>()?;
        let steps = file.variable(&group, "axis_steps", &cells, 0i32)?;
        steps.describe(&[(
            "long_name",
            "equal steps of the sweep; 0 for a phase-continuous ramp",
        )])?;
        let begun = file.variable(&group, "begun", &cells, i64::MIN)?;
        begun.describe(&[("long_name", "time when the sweep was started")])?;
        begun.describe(&TIME)?;
        begun.declare_fill()?;
        let mut taken = Names::default();
        for (name, ..) in AXIS {
            taken.free(name);
        }
        let channels = survey
            .channels
            .iter()
            .map(|channel| ChannelRows::lay_out(file, &group, channel, &mut taken, &cells, &sample))
            .collect::<Result<_, _>>()?;
        Ok(Self {
            directions,
            repeats: survey.repeats,
            samples: survey.samples,
            zero,
            detuning,
            averages,
            axis,
            steps,
            begun,
            channels,
        })
    }

    /// Put the samples of the next point; `None` leaves its row missing.
    pub fn put(&mut self, trace: Option<&Trace>) -> Result<(), Error> {
        let trace = trace.map_or(&[][..], Vec::as_slice);
        let mut cells: Vec<Option<&Acquisition>> = vec![None; self.directions.len() * self.repeats];
        for acquisition in trace {
            let direction = self
                .directions
                .iter()
                .position(|known| *known == acquisition.direction);
            if let Some(direction) = direction
                && let Some(cell) =
                    cells.get_mut(direction * self.repeats + acquisition.repeat as usize)
            {
                *cell = Some(acquisition);
            }
        }
        self.put_detuning(&cells)?;
        self.put_axes(&cells)?;
        for (channel, average) in self.channels.iter_mut().zip(&mut self.averages) {
            channel.put(&cells, self.samples)?;
            average.put(channel.name(), &cells, self.repeats, self.samples)?;
        }
        Ok(())
    }

    /// Write what is left.
    pub fn finish(self) -> Result<(), Error> {
        self.detuning.finish()?;
        for average in self.averages {
            match average.mean {
                Wide::F32(rows) => rows.finish()?,
                Wide::F64(rows) => rows.finish()?,
            };
            average.error.finish()?;
        }
        for rows in self.axis {
            rows.finish()?;
        }
        self.steps.finish()?;
        self.begun.finish()?;
        self.channels.into_iter().try_for_each(ChannelRows::finish)
    }

    fn put_detuning(&mut self, cells: &[Option<&Acquisition>]) -> Result<(), Error> {
        let row = self.detuning.row()?;
        for (row, repeats) in row
            .chunks_exact_mut(self.samples)
            .zip(cells.chunks_exact(self.repeats))
        {
            let Some(first) = repeats.iter().flatten().next() else {
                continue;
            };
            let samples = first.axis.samples.min(self.samples as u32);
            for (i, place) in (0..samples).zip(row) {
                *place = first.axis.frequency(i) - self.zero;
            }
        }
        Ok(())
    }

    fn put_axes(&mut self, cells: &[Option<&Acquisition>]) -> Result<(), Error> {
        for (which, rows) in self.axis.iter_mut().enumerate() {
            for (place, cell) in rows.row()?.iter_mut().zip(cells) {
                if let Some(Acquisition { axis, .. }) = cell {
                    let all = [
                        axis.start,
                        axis.stop,
                        axis.duration,
                        axis.delay,
                        axis.interval,
                    ];
                    *place = all[which];
                }
            }
        }
        for (place, cell) in self.steps.row()?.iter_mut().zip(cells) {
            *place = cell
                .and_then(|cell| cell.axis.steps)
                .map_or(0, u32::cast_signed);
        }
        for (place, cell) in self.begun.row()?.iter_mut().zip(cells) {
            if let Some(cell) = cell {
                *place = cell.begun;
            }
        }
        Ok(())
    }
}

impl Average {
    fn lay_out(
        file: &NetcdfFile,
        channel: &Channel,
        names: &mut Names,
        along: &[&Dimension],
    ) -> Result<Self, Error> {
        let root = file.root();
        let name = names.free(&channel.name);
        let error_name = names.free(&format!("{name}_standard_error"));
        let attributes = [
            (
                "long_name",
                &*format!("{}: mean over the acquisitions", channel.name),
            ),
            ("units", &channel.unit),
            ("coordinates", "detuning"),
            ("ancillary_variables", &error_name),
        ];
        let mean = if channel.is_narrow() {
            let rows = file.variable(root, &name, along, f32::NAN)?;
            rows.describe(&attributes)?;
            rows.declare_fill()?;
            Wide::F32(rows)
        } else {
            let rows = file.variable(root, &name, along, f64::NAN)?;
            rows.describe(&attributes)?;
            rows.declare_fill()?;
            Wide::F64(rows)
        };
        let error = file.variable(root, &error_name, along, f32::NAN)?;
        error.describe(&[
            (
                "long_name",
                &format!(
                    "{}: standard error of the mean, from the scatter of separate acquisitions; missing for fewer than two",
                    channel.name
                ),
            ),
            ("units", &channel.unit),
            ("coordinates", "detuning"),
        ])?;
        error.declare_fill()?;
        Ok(Self { mean, error })
    }

    fn put(
        &mut self,
        channel: &str,
        cells: &[Option<&Acquisition>],
        repeats: usize,
        samples: usize,
    ) -> Result<(), Error> {
        let mut means = vec![f64::NAN; cells.len() / repeats * samples];
        let errors = self.error.row()?;
        for ((means, errors), cells) in means
            .chunks_exact_mut(samples)
            .zip(errors.chunks_exact_mut(samples))
            .zip(cells.chunks_exact(repeats))
        {
            let data: Vec<&ChannelData> = cells
                .iter()
                .flatten()
                .filter_map(|cell| cell.channel(channel))
                .collect();
            average(&data, means, errors);
        }
        match &mut self.mean {
            Wide::F32(rows) => {
                for (place, mean) in rows.row()?.iter_mut().zip(means) {
                    *place = mean as f32;
                }
            }
            Wide::F64(rows) => rows.row()?.copy_from_slice(&means),
        }
        Ok(())
    }
}

/// Mean of every sample over `data`, and its standard error s / sqrt(n) with n - 1 degrees of freedom
/// (JCGM 100:2008, 4.2.3). Samples that none has stay as they are; errors need two.
fn average(data: &[&ChannelData], means: &mut [f64], errors: &mut [f32]) {
    let values: Vec<Vec<f64>> = data.iter().map(|data| scaled(data)).collect();
    for (i, (mean, error)) in means.iter_mut().zip(errors).enumerate() {
        let at = || values.iter().filter_map(|values| values.get(i).copied());
        let n = at().count();
        if n == 0 {
            continue;
        }
        *mean = at().sum::<f64>() / n as f64;
        if n > 1 {
            let squares: f64 = at().map(|value| (value - *mean).powi(2)).sum();
            *error = (squares / ((n - 1) * n) as f64).sqrt() as f32;
        }
    }
}

fn scaled(data: &ChannelData) -> Vec<f64> {
    let (scale, offset) = (data.scale, data.offset);
    fn all<T: Copy + Into<f64>>(codes: &[T], scale: f64, offset: f64) -> Vec<f64> {
        codes
            .iter()
            .map(|&code| scale * code.into() + offset)
            .collect()
    }
    match &data.codes {
        Codes::I8(codes) => all(codes, scale, offset),
        Codes::U8(codes) => all(codes, scale, offset),
        Codes::I16(codes) => all(codes, scale, offset),
        Codes::U16(codes) => all(codes, scale, offset),
        Codes::F32(codes) => all(codes, scale, offset),
        Codes::F64(codes) => all(codes, scale, offset),
    }
}

fn lay_out_directions(file: &mut NetcdfFile, directions: &[Direction]) -> Result<Dimension, Error> {
    let root = file.root().clone();
    let (dimension, mut rows) = file.coordinate::<i8>(&root, "direction", directions.len())?;
    rows.describe(&[
        ("long_name", "which way the sweep ran"),
        ("flag_meanings", "up down"),
    ])?;
    rows.number("flag_values", &[0i8, 1])?;
    for direction in directions {
        rows.put(match direction {
            Direction::Up => 0,
            Direction::Down => 1,
        })?;
    }
    rows.finish()?;
    Ok(dimension)
}

fn put_zero(zero: &Dataset) -> Result<(), Error> {
    put_text(
        zero,
        "long_name",
        "frequency from which detuning is counted: the middle of the first point's window",
    )?;
    put_text(zero, "units", "Hz")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn data(codes: Vec<i16>) -> ChannelData {
        ChannelData {
            name: "s".into(),
            codes: Codes::I16(codes),
            scale: 0.5,
            offset: 1.0,
            unit: "V".into(),
            clipped: 0,
        }
    }

    #[test]
    fn means_and_standard_errors_over_what_is_there() {
        let (a, b) = (data(vec![0, 2, 4]), data(vec![4, 2]));
        let (mut means, mut errors) = ([f64::NAN; 4], [f32::NAN; 4]);
        average(&[&a, &b], &mut means, &mut errors);
        assert_eq!(means[..3], [2.0, 2.0, 3.0]);
        assert!(means[3].is_nan() && errors[2].is_nan());
        // Two values 1 and 3: s = sqrt(2), divided by sqrt(2).
        assert_eq!(errors[..2], [1.0, 0.0]);
    }
}
