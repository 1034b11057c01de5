//! The few things that make an HDF5 file a netCDF-4 file: dimension scales, attribute texts, char arrays, and
//! writing row after row. Knows nothing of runs.
//!
//! After "NetCDF-4 file format", appendix C of the netCDF user's guide (Unidata), and the HDF5 dimension scale
//! specification (The HDF Group). The crate `hdf5-metno` has no call for dimension scales, so `libhdf5_hl` is
//! called here under that crate's lock; this is the only file of the daemon with unsafe code.
#![expect(
    unsafe_code,
    reason = "the crate has no call for dimension scales, fixed-length texts and rows of run-time rank"
)]

use std::ffi::CString;
use std::os::raw::c_char;
use std::path::Path;
use std::ptr::null;

use hdf5_metno::plist::DatasetCreateBuilder;
use hdf5_metno::plist::dataset_create::AttrCreationOrder;
use hdf5_metno::plist::file_create::LinkCreationOrder;
use hdf5_metno::types::TypeDescriptor;
use hdf5_metno::{Dataset, Datatype, Error, File, Group, H5Type, Location, h5check};
use hdf5_metno_sys::LOCK;
use hdf5_metno_sys::h5::{herr_t, hsize_t};
use hdf5_metno_sys::h5a::H5Awrite;
use hdf5_metno_sys::h5d::H5Dwrite;
use hdf5_metno_sys::h5i::hid_t;
use hdf5_metno_sys::h5p::H5P_DEFAULT;
use hdf5_metno_sys::h5s::{H5S_SELECT_SET, H5Sclose, H5Screate_simple, H5Sselect_hyperslab};

#[link(name = "hdf5_hl")]
unsafe extern "C" {
    fn H5DSset_scale(dataset: hid_t, name: *const c_char) -> herr_t;
    fn H5DSattach_scale(dataset: hid_t, scale: hid_t, index: u32) -> herr_t;
}

/// Bytes of a chunk of a large variable, about.
const CHUNK: usize = 256 << 10;

/// What netCDF itself writes as the name of a dimension that has no variable; the length follows, 10 wide.
const NO_VARIABLE: &str = "This is a netCDF dimension but not a netCDF variable.";

/// One byte of text, netCDF's `char`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
#[repr(transparent)]
pub struct Char(pub u8);

// SAFETY: a `Char` is one byte, and so is a fixed-length string of length 1.
unsafe impl H5Type for Char {
    fn type_descriptor() -> TypeDescriptor {
        TypeDescriptor::FixedAscii(1)
    }
}

/// A file being written, with what its dimensions share.
#[derive(Debug)]
pub struct NetcdfFile {
    file: File,
    dimensions: i32,
    deflate: Option<u8>,
}

/// A dimension: its length and the data set that is its scale.
#[derive(Debug)]
pub struct Dimension {
    scale: Dataset,
    /// Number of places along it.
    pub length: usize,
}

impl NetcdfFile {
    /// Make a new file at `path`, replacing one that is there. `deflate` compresses large variables, 1 to 9.
    pub fn create(path: &Path, deflate: Option<u8>) -> Result<Self, Error> {
        let file = File::with_options()
            .with_fapl(|access| access.libver_v110())
            .with_fcpl(|create| {
                create
                    .obj_track_times(false)
                    .link_creation_order(LinkCreationOrder::Indexed)
                    .attr_creation_order(AttrCreationOrder::Indexed)
            })
            .create(path)?;
        Ok(Self {
            file,
            dimensions: 0,
            deflate,
        })
    }

    /// The root group.
    pub fn root(&self) -> &Group {
        &self.file
    }

    /// Make a group under the root.
    pub fn group(&self, name: &str) -> Result<Group, Error> {
        self.file
            .create_group_builder()
            .with_gcpl(|create| {
                create
                    .obj_track_times(false)
                    .link_creation_order(LinkCreationOrder::Indexed)
                    .attr_creation_order(AttrCreationOrder::Indexed)
            })
            .create(name)
    }

    /// Make a dimension without a variable. `length` must not be zero: netCDF would take that for unlimited.
    pub fn dimension(
        &mut self,
        group: &Group,
        name: &str,
        length: usize,
    ) -> Result<Dimension, Error> {
        let scale = group
            .new_dataset_builder()
            .empty::<f32>()
            .shape([length])
            .no_chunk()
            .with_dcpl(|create| untimed(create))
            .create(name)?;
        self.scale(scale, &format!("{NO_VARIABLE}{length:10}"), length)
    }

    /// Make a dimension with the variable of the same name along it.
    pub fn coordinate<T: H5Type + Copy + Default>(
        &mut self,
        group: &Group,
        name: &str,
        length: usize,
    ) -> Result<(Dimension, Rows<T>), Error> {
        let rows = self.rows::<T>(group, name, &[length], T::default())?;
        let dimension = self.scale(rows.dataset.clone(), name, length)?;
        Ok((dimension, rows))
    }

    /// Make a variable along `dimensions`, filled row by row along the first one, with `fill` where nothing is put.
    pub fn variable<T: H5Type + Copy>(
        &self,
        group: &Group,
        name: &str,
        dimensions: &[&Dimension],
        fill: T,
    ) -> Result<Rows<T>, Error> {
        let shape: Vec<usize> = dimensions
            .iter()
            .map(|dimension| dimension.length)
            .collect();
        let rows = self.rows(group, name, &shape, fill)?;
        attach(&rows.dataset, dimensions)?;
        Ok(rows)
    }

    /// Make a variable without dimension.
    pub fn scalar<T: H5Type>(&self, group: &Group, name: &str, value: T) -> Result<Dataset, Error> {
        let dataset = group
            .new_dataset_builder()
            .empty::<T>()
            .shape(())
            .with_dcpl(|create| untimed(create))
            .create(name)?;
        dataset.write_scalar(&value)?;
        Ok(dataset)
    }

    /// Make a variable that is one text, UTF-8, along a dimension of its own.
    pub fn text(&mut self, group: &Group, name: &str, text: &str) -> Result<Dataset, Error> {
        let characters = self.dimension(group, &format!("{name}_bytes"), text.len().max(1))?;
        let mut rows = self.variable(group, name, &[&characters], Char(0))?;
        put_text(&rows.dataset, "_Encoding", "utf-8")?;
        for byte in text.bytes() {
            rows.row()?[0] = Char(byte);
        }
        rows.finish()
    }

    /// Make a variable of texts along `dimension`, UTF-8, each at most `longest` bytes.
    pub fn texts(
        &mut self,
        group: &Group,
        name: &str,
        dimension: &Dimension,
        longest: usize,
    ) -> Result<Rows<Char>, Error> {
        let characters = self.dimension(group, &format!("{name}_bytes"), longest.max(1))?;
        let rows = self.variable(group, name, &[dimension, &characters], Char(0))?;
        put_text(&rows.dataset, "_Encoding", "utf-8")?;
        Ok(rows)
    }

    /// Write everything out and close the file. Every variable and group must have been dropped.
    pub fn close(self) -> Result<(), Error> {
        self.file.flush()?;
        self.file.close()
    }

    fn scale(&mut self, scale: Dataset, name: &str, length: usize) -> Result<Dimension, Error> {
        let name = c_text(name)?;
        {
            let _lock = LOCK.lock();
            // SAFETY: the data set is open, the name ends in NUL, and the library's lock is held.
            h5check(unsafe { H5DSset_scale(scale.id(), name.as_ptr()) })?;
        }
        put_number(&scale, "_Netcdf4Dimid", self.dimensions)?;
        self.dimensions += 1;
        Ok(Dimension { scale, length })
    }

    fn rows<T: H5Type + Copy>(
        &self,
        group: &Group,
        name: &str,
        shape: &[usize],
        fill: T,
    ) -> Result<Rows<T>, Error> {
        let row: usize = shape[1..].iter().product();
        let bytes = size_of::<T>() * row;
        let at_once = (CHUNK / bytes.max(1)).clamp(1, shape[0].max(1));
        let chunk = chunk_of(shape, at_once, size_of::<T>());
        let small = at_once >= shape[0];
        let builder = group.new_dataset_builder().empty::<T>().shape(shape);
        let dataset = builder
            .with_dcpl(|create| {
                let create = untimed(create).fill_value(fill);
                match (small, self.deflate) {
                    (true, None) => create.no_chunk(),
                    (_, None) => create.chunk(chunk.clone()),
                    (_, Some(level)) => create.chunk(chunk.clone()).shuffle().deflate(level),
                }
            })
            .create(name)?;
        Ok(Rows {
            memory_type: Datatype::from_type::<T>()?,
            dataset,
            shape: shape.to_vec(),
            row,
            at_once,
            buffer: Vec::new(),
            written: 0,
            fill,
        })
    }
}

/// Chunk lengths of about [`CHUNK`] bytes: whole rows, or a piece of one row where one is longer.
fn chunk_of(shape: &[usize], at_once: usize, size: usize) -> Vec<usize> {
    let mut chunk = shape.to_vec();
    chunk[0] = at_once;
    for axis in 1..chunk.len() {
        let bytes = chunk.iter().product::<usize>() * size;
        if bytes <= CHUNK {
            break;
        }
        let others = (bytes / chunk[axis]).max(1);
        chunk[axis] = (CHUNK / others).clamp(1, shape[axis]);
    }
    chunk
}

/// A variable being filled row by row along its first dimension. Holds about one chunk in memory.
#[derive(Debug)]
pub struct Rows<T> {
    dataset: Dataset,
    memory_type: Datatype,
    shape: Vec<usize>,
    row: usize,
    at_once: usize,
    buffer: Vec<T>,
    written: usize,
    fill: T,
}

impl<T: H5Type + Copy> Rows<T> {
    /// The next row, all fill values, to be written into.
    pub fn row(&mut self) -> Result<&mut [T], Error> {
        if self.buffer.len() >= self.at_once * self.row {
            self.write()?;
        }
        let start = self.buffer.len();
        self.buffer.resize(start + self.row, self.fill);
        Ok(&mut self.buffer[start..])
    }

    /// Put a single value as the next row.
    pub fn put(&mut self, value: T) -> Result<(), Error> {
        self.row()?[0] = value;
        Ok(())
    }

    /// Give the variable a text attribute.
    pub fn describe(&self, attributes: &[(&str, &str)]) -> Result<(), Error> {
        attributes
            .iter()
            .try_for_each(|(name, text)| put_text(&self.dataset, name, text))
    }

    /// Give the variable a number, or several, as attribute.
    pub fn number<N: H5Type>(&self, name: &str, values: &[N]) -> Result<(), Error> {
        put_numbers(&self.dataset, name, values)
    }

    /// Say that the fill value stands for "nothing here".
    pub fn declare_fill(&self) -> Result<(), Error> {
        put_numbers(&self.dataset, "_FillValue", &[self.fill])
    }

    /// Write what is left.
    pub fn finish(mut self) -> Result<Dataset, Error> {
        self.write()?;
        Ok(self.dataset)
    }

    fn write(&mut self) -> Result<(), Error> {
        let rows = self.buffer.len() / self.row.max(1);
        if rows == 0 {
            return Ok(());
        }
        let mut count: Vec<hsize_t> = self.shape.iter().map(|&n| n as hsize_t).collect();
        let whole = count.clone();
        count[0] = rows as hsize_t;
        let mut start = vec![0; count.len()];
        start[0] = self.written as hsize_t;
        let _lock = LOCK.lock();
        // SAFETY: the library's lock is held; the selection has `rows` rows, which is what the buffer holds in
        // elements of `memory_type`, whose layout is that of `T`; both spaces are closed before the end.
        unsafe {
            let rank = count.len() as i32;
            let memory = h5check(H5Screate_simple(rank, count.as_ptr(), null()))?;
            let file = h5check(H5Screate_simple(rank, whole.as_ptr(), null()));
            let result = file.and_then(|file| {
                let selected = h5check(H5Sselect_hyperslab(
                    file,
                    H5S_SELECT_SET,
                    start.as_ptr(),
                    null(),
                    count.as_ptr(),
                    null(),
                ));
                let written = selected.and_then(|_| {
                    h5check(H5Dwrite(
                        self.dataset.id(),
                        self.memory_type.id(),
                        memory,
                        file,
                        H5P_DEFAULT,
                        self.buffer.as_ptr().cast(),
                    ))
                });
                H5Sclose(file);
                written
            });
            H5Sclose(memory);
            result?;
        }
        self.written += rows;
        self.buffer.clear();
        Ok(())
    }
}

impl Rows<Char> {
    /// Put `text` as the next row, cut at a character's border where it is too long.
    pub fn put_text(&mut self, text: &str) -> Result<(), Error> {
        let row = self.row()?;
        let text = cut(text, row.len());
        for (place, byte) in row.iter_mut().zip(text.bytes()) {
            *place = Char(byte);
        }
        Ok(())
    }
}

/// As much of `text` from its beginning as fits in `longest` bytes, whole characters.
pub fn cut(text: &str, longest: usize) -> &str {
    let fits = (0..=longest.min(text.len())).rfind(|&end| text.is_char_boundary(end));
    &text[..fits.unwrap_or(0)]
}

/// Give `object` a text attribute, as netCDF writes it: of fixed length. An empty text is left out.
pub fn put_text(object: &Location, name: &str, text: &str) -> Result<(), Error> {
    if text.is_empty() {
        return Ok(());
    }
    let descriptor = match text.is_ascii() {
        true => TypeDescriptor::FixedAscii(text.len()),
        false => TypeDescriptor::FixedUnicode(text.len()),
    };
    let attribute = object
        .new_attr_builder()
        .empty_as(&descriptor)
        .shape(())
        .create(name)?;
    let memory_type = attribute.dtype()?;
    let _lock = LOCK.lock();
    // SAFETY: attribute and type are open, the type has as many bytes as the text, the library's lock is held.
    h5check(unsafe { H5Awrite(attribute.id(), memory_type.id(), text.as_ptr().cast()) })?;
    Ok(())
}

/// Give `object` one number as attribute.
pub fn put_number<N: H5Type>(object: &Location, name: &str, value: N) -> Result<(), Error> {
    put_numbers(object, name, &[value])
}

/// Give `object` numbers as attribute.
pub fn put_numbers<N: H5Type>(object: &Location, name: &str, values: &[N]) -> Result<(), Error> {
    object
        .new_attr_builder()
        .with_data(values)
        .create(name)
        .map(drop)
}

fn attach(dataset: &Dataset, dimensions: &[&Dimension]) -> Result<(), Error> {
    let _lock = LOCK.lock();
    for (index, dimension) in (0..).zip(dimensions) {
        // SAFETY: both data sets are open and the library's lock is held.
        h5check(unsafe { H5DSattach_scale(dataset.id(), dimension.scale.id(), index) })?;
    }
    Ok(())
}

/// Without times of change, so that the same journal gives the same bytes.
fn untimed(create: &mut DatasetCreateBuilder) -> &mut DatasetCreateBuilder {
    create
        .obj_track_times(false)
        .attr_creation_order(AttrCreationOrder::Indexed)
}

fn c_text(text: &str) -> Result<CString, Error> {
    CString::new(text).map_err(|_| Error::Internal(format!("`{text}` contains NUL")))
}
