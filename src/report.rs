//! What a person sees of an answer: the figure (SVG and PNG) and the text on the terminal.
//! Owns wording, rounding and drawing; never computes a result and never opens a run folder by itself.

pub mod figure;
pub mod palette;
pub mod picture;
pub mod png;
pub mod terminal;
pub mod wording;

use std::fs;
use std::io;
use std::path::{Path, PathBuf};

pub use picture::{PicturePoint, PictureSweep, ScanPicture};
pub use terminal::{RunSummary, answer_text};

/// Width of the PNG in pixels; its height follows from the figure.
pub const PNG_WIDTH: u32 = 2000;

/// Why a figure could not be written.
#[derive(Debug, thiserror::Error)]
pub enum FigureError {
    /// A file could not be written.
    #[error("cannot write `{}`: {source}; check that the folder exists and has room", path.display())]
    Write {
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
    /// The drawing could not be turned into pixels.
    #[error("cannot draw the figure as png: {0}; the svg beside it is complete")]
    Pixels(#[from] png::PngError),
}

/// Writes `figure.svg` and `figure.png` into `folder` and returns both paths.
///
/// Each file is written under another name and renamed, so that a reader never sees half of one.
/// The SVG is written first and stays when the PNG fails.
///
/// # Errors
/// When a file cannot be written, or the drawing cannot be turned into pixels.
pub fn write_figure(picture: &ScanPicture, folder: &Path) -> Result<[PathBuf; 2], FigureError> {
    let svg = figure::figure(picture);
    let svg_path = folder.join("figure.svg");
    write_whole(&svg_path, svg.as_bytes())?;
    let png_path = folder.join("figure.png");
    write_whole(&png_path, &png::png(&svg, PNG_WIDTH)?)?;
    Ok([svg_path, png_path])
}

fn write_whole(path: &Path, bytes: &[u8]) -> Result<(), FigureError> {
    let mut unfinished = path.as_os_str().to_owned();
    unfinished.push(".tmp");
    let failed = |source| FigureError::Write {
        path: path.to_owned(),
        source,
    };
    fs::write(&unfinished, bytes).map_err(failed)?;
    fs::rename(&unfinished, path).map_err(failed)
}
