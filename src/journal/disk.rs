//! What a journal and a run folder ask of a disk, as a small seam: production uses [`LocalDisk`], a test may
//! put a simulated disk in its place. Never interprets the bytes it is handed.

use std::fmt::Debug;
use std::fs::{File, OpenOptions};
use std::io::{self, Read, Seek, Write};
use std::path::Path;

use rustix::fs::{FallocateFlags, FlockOperation, fallocate, flock};

/// A file that can be read from anywhere.
pub trait Source: Read + Seek + Send {}
impl<T: Read + Seek + Send> Source for T {}

/// A file that only grows at its end.
pub trait DiskFile: Debug + Send {
    /// Write `bytes` at the end, in one write where the system takes it whole.
    fn append(&mut self, bytes: &[u8]) -> io::Result<()>;
    /// Return when everything written is on the medium (fdatasync).
    fn sync(&mut self) -> io::Result<()>;
    /// Set blocks aside for the `bytes` after offset `from` without changing the file's length.
    fn allocate(&mut self, from: u64, bytes: u64) -> io::Result<()>;
    /// Cut the file to `length` bytes; also gives back blocks set aside beyond it.
    fn truncate(&mut self, length: u64) -> io::Result<()>;
}

/// Holds a folder for one process until dropped.
pub trait Lock: Debug + Send {}

/// The few operations that a durable run folder needs.
pub trait Disk: Debug + Send + Sync {
    /// Make one new folder; fails if it exists.
    fn create_folder(&self, path: &Path) -> io::Result<()>;
    /// Make a new file; fails if it exists.
    fn create(&self, path: &Path) -> io::Result<Box<dyn DiskFile>>;
    /// Open an existing file to add to it.
    fn open_append(&self, path: &Path) -> io::Result<Box<dyn DiskFile>>;
    /// Open an existing file for reading.
    fn open(&self, path: &Path) -> io::Result<Box<dyn Source>>;
    /// Give `from` the name `to`, replacing what had it.
    fn rename(&self, from: &Path, to: &Path) -> io::Result<()>;
    /// Return when the names in folder `path` are on the medium (fsync of the folder).
    fn sync_folder(&self, path: &Path) -> io::Result<()>;
    /// Take the folder for this process; `WouldBlock` if another one has it.
    fn lock_folder(&self, path: &Path) -> io::Result<Box<dyn Lock>>;
}

/// The file system of this machine.
#[derive(Debug, Clone, Copy, Default)]
pub struct LocalDisk;

impl Disk for LocalDisk {
    fn create_folder(&self, path: &Path) -> io::Result<()> {
        std::fs::create_dir(path)
    }

    fn create(&self, path: &Path) -> io::Result<Box<dyn DiskFile>> {
        let file = OpenOptions::new()
            .append(true)
            .create_new(true)
            .open(path)?;
        Ok(Box::new(LocalFile { file }))
    }

    fn open_append(&self, path: &Path) -> io::Result<Box<dyn DiskFile>> {
        let file = OpenOptions::new().append(true).open(path)?;
        Ok(Box::new(LocalFile { file }))
    }

    fn open(&self, path: &Path) -> io::Result<Box<dyn Source>> {
        Ok(Box::new(File::open(path)?))
    }

    fn rename(&self, from: &Path, to: &Path) -> io::Result<()> {
        std::fs::rename(from, to)
    }

    fn sync_folder(&self, path: &Path) -> io::Result<()> {
        File::open(path)?.sync_all()
    }

    fn lock_folder(&self, path: &Path) -> io::Result<Box<dyn Lock>> {
        let folder = File::open(path)?;
        flock(&folder, FlockOperation::NonBlockingLockExclusive)?;
        Ok(Box::new(LocalLock { _folder: folder }))
    }
}

#[derive(Debug)]
struct LocalFile {
    file: File,
}

impl DiskFile for LocalFile {
    fn append(&mut self, bytes: &[u8]) -> io::Result<()> {
        self.file.write_all(bytes)
    }

    fn sync(&mut self) -> io::Result<()> {
        self.file.sync_data()
    }

    fn allocate(&mut self, from: u64, bytes: u64) -> io::Result<()> {
        match fallocate(&self.file, FallocateFlags::KEEP_SIZE, from, bytes) {
            // Some file systems cannot set blocks aside. Then the free space is all that can be asked for.
            Err(rustix::io::Errno::OPNOTSUPP | rustix::io::Errno::NOSYS) => {
                let room = rustix::fs::fstatvfs(&self.file)?;
                if room.f_bavail.saturating_mul(room.f_frsize) < bytes {
                    return Err(io::ErrorKind::StorageFull.into());
                }
                Ok(())
            }
            other => Ok(other?),
        }
    }

    fn truncate(&mut self, length: u64) -> io::Result<()> {
        self.file.set_len(length)
    }
}

/// An flock on the folder itself: the system gives it back whatever way the process ends.
#[derive(Debug)]
struct LocalLock {
    _folder: File,
}

impl Lock for LocalLock {}
