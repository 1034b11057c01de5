//! The codes of one channel in an archive, as received, in the narrowest number format that holds them all.

use darkline_core::trace::{Acquisition, ChannelData, Codes};
use hdf5_metno::{Error, Group, H5Type};

use super::Names;
use super::netcdf::{Dimension, NetcdfFile, Rows};
use super::survey::{Channel, Storage};

/// One channel of the acquisitions.
pub struct ChannelRows {
    name: String,
    codes: CodeRows,
    scale: Rows<f64>,
    offset: Rows<f64>,
    clipped: Rows<i32>,
}

enum CodeRows {
    I8(Rows<i8>),
    U8(Rows<u8>),
    I16(Rows<i16>),
    U16(Rows<u16>),
    I32(Rows<i32>),
    F32(Rows<f32>),
    F64(Rows<f64>),
}

impl ChannelRows {
    /// Lay it out in `group`, its scales along `cells`, its codes along `sample` as well.
    pub fn lay_out(
        file: &NetcdfFile,
        group: &Group,
        channel: &Channel,
        names: &mut Names,
        cells: &[&Dimension],
        sample: &Dimension,
    ) -> Result<Self, Error> {
        let name = names.free(&channel.name);
        let along: Vec<&Dimension> = cells.iter().copied().chain([sample]).collect();
        let scale = file.variable(
            group,
            &names.free(&format!("{name}_scale")),
            cells,
            f64::NAN,
        )?;
        let offset = file.variable(
            group,
            &names.free(&format!("{name}_offset")),
            cells,
            f64::NAN,
        )?;
        for (rows, word) in [(&scale, "value of one code"), (&offset, "value of code 0")] {
            rows.describe(&[
                ("long_name", &format!("{}: {word}", channel.name)),
                ("units", &channel.unit),
            ])?;
            rows.declare_fill()?;
        }
        let clipped =
            file.variable(group, &names.free(&format!("{name}_clipped")), cells, -1i32)?;
        clipped.describe(&[(
            "long_name",
            &format!(
                "{}: samples at an end of the digitizer's range",
                channel.name
            ),
        )])?;
        clipped.declare_fill()?;
        Ok(Self {
            codes: CodeRows::lay_out(file, group, &name, channel, &along)?,
            name: channel.name.clone(),
            scale,
            offset,
            clipped,
        })
    }

    /// What the sequence calls the channel.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// Put the codes of the next point; `None` for each acquisition that is missing.
    pub fn put(&mut self, cells: &[Option<&Acquisition>], samples: usize) -> Result<(), Error> {
        let data: Vec<Option<&ChannelData>> = cells
            .iter()
            .map(|cell| cell.and_then(|cell| cell.channel(&self.name)))
            .collect();
        for (place, data) in self.scale.row()?.iter_mut().zip(&data) {
            *place = data.map_or(f64::NAN, |data| data.scale);
        }
        for (place, data) in self.offset.row()?.iter_mut().zip(&data) {
            *place = data.map_or(f64::NAN, |data| data.offset);
        }
        for (place, data) in self.clipped.row()?.iter_mut().zip(&data) {
            *place = data.map_or(-1, |data| data.clipped.cast_signed());
        }
        match &mut self.codes {
            CodeRows::I8(rows) => put_codes(rows, &data, samples, |code| code as i8),
            CodeRows::U8(rows) => put_codes(rows, &data, samples, |code| code as u8),
            CodeRows::I16(rows) => put_codes(rows, &data, samples, |code| code as i16),
            CodeRows::U16(rows) => put_codes(rows, &data, samples, |code| code as u16),
            CodeRows::I32(rows) => put_codes(rows, &data, samples, |code| code as i32),
            CodeRows::F32(rows) => put_codes(rows, &data, samples, |code| code as f32),
            CodeRows::F64(rows) => put_codes(rows, &data, samples, |code| code),
        }
    }

    /// Write what is left.
    pub fn finish(self) -> Result<(), Error> {
        match self.codes {
            CodeRows::I8(rows) => rows.finish(),
            CodeRows::U8(rows) => rows.finish(),
            CodeRows::I16(rows) => rows.finish(),
            CodeRows::U16(rows) => rows.finish(),
            CodeRows::I32(rows) => rows.finish(),
            CodeRows::F32(rows) => rows.finish(),
            CodeRows::F64(rows) => rows.finish(),
        }?;
        self.scale.finish()?;
        self.offset.finish()?;
        self.clipped.finish().map(drop)
    }
}

/// Put the next row of codes. The storage was chosen so that `narrow` loses nothing.
fn put_codes<T: H5Type + Copy>(
    rows: &mut Rows<T>,
    data: &[Option<&ChannelData>],
    samples: usize,
    narrow: impl Fn(f64) -> T + Copy,
) -> Result<(), Error> {
    let row = rows.row()?;
    for (row, data) in row.chunks_exact_mut(samples).zip(data) {
        fn put<T, C: Copy + Into<f64>>(row: &mut [T], codes: &[C], narrow: impl Fn(f64) -> T) {
            for (place, &code) in row.iter_mut().zip(codes) {
                *place = narrow(code.into());
            }
        }
        match data.map(|data| &data.codes) {
            None => {}
            Some(Codes::I8(codes)) => put(row, codes, narrow),
            Some(Codes::U8(codes)) => put(row, codes, narrow),
            Some(Codes::I16(codes)) => put(row, codes, narrow),
            Some(Codes::U16(codes)) => put(row, codes, narrow),
            Some(Codes::F32(codes)) => put(row, codes, narrow),
            Some(Codes::F64(codes)) => put(row, codes, narrow),
        }
    }
    Ok(())
}

impl CodeRows {
    fn lay_out(
        file: &NetcdfFile,
        group: &Group,
        name: &str,
        channel: &Channel,
        along: &[&Dimension],
    ) -> Result<Self, Error> {
        let fill = channel.storage.fill();
        Ok(match channel.storage {
            Storage::I8 => Self::I8(variable(file, group, name, channel, along, fill as i8)?),
            Storage::U8 => Self::U8(variable(file, group, name, channel, along, fill as u8)?),
            Storage::I16 => Self::I16(variable(file, group, name, channel, along, fill as i16)?),
            Storage::U16 => Self::U16(variable(file, group, name, channel, along, fill as u16)?),
            Storage::I32 => Self::I32(variable(file, group, name, channel, along, fill as i32)?),
            Storage::F32 => Self::F32(variable(file, group, name, channel, along, fill as f32)?),
            Storage::F64 => Self::F64(variable(file, group, name, channel, along, fill)?),
        })
    }
}

fn variable<T: H5Type + Copy>(
    file: &NetcdfFile,
    group: &Group,
    name: &str,
    channel: &Channel,
    along: &[&Dimension],
    fill: T,
) -> Result<Rows<T>, Error> {
    let rows = file.variable(group, name, along, fill)?;
    let long_name = format!("{}: codes as received", channel.name);
    rows.describe(&[("long_name", &long_name)])?;
    match channel.scaling {
        Some((scale, offset)) => {
            rows.number("scale_factor", &[scale])?;
            rows.number("add_offset", &[offset])?;
            rows.describe(&[("units", &channel.unit)])?;
        }
        None => rows.describe(&[(
            "comment",
            &format!(
                "the scale changed during the run: value = {name} * {name}_scale + {name}_offset"
            ),
        )])?,
    }
    let cells: usize = along.iter().map(|dimension| dimension.length).product();
    if channel.samples < cells {
        rows.declare_fill()?;
    }
    Ok(rows)
}
