//! One owner per link: an flock on a file named after the link as resolved. The system drops the lock with
//! its process, however that ended, so that a file left behind is no obstacle.

use std::fs::{self, File, OpenOptions, TryLockError};
use std::io::{self, Read, Seek, Write};
use std::net::ToSocketAddrs;
use std::os::unix::fs::{OpenOptionsExt, PermissionsExt};
use std::path::{Path, PathBuf};

use thiserror::Error;

use super::Address;

/// Why a link is not ours.
#[derive(Debug, Error)]
pub enum OwnershipError {
    /// Another process (or another part of this one) has it.
    #[error("{link} is in use by process {owner}")]
    Owned {
        /// The address.
        link: String,
        /// Process id, or "unknown".
        owner: String,
    },
    /// The lock file cannot be made.
    #[error("the lock file {} cannot be used: {source}", path.display())]
    File {
        /// Its path.
        path: PathBuf,
        /// The system's words.
        source: io::Error,
    },
}

/// A link that is ours until this is dropped.
#[derive(Debug)]
pub struct Ownership {
    file: File,
}

impl Ownership {
    /// Takes the link, in the runtime folder that all of Darkline on this machine shares.
    ///
    /// # Errors
    /// [`OwnershipError::Owned`] names the owner's process.
    pub fn take(address: &Address) -> Result<Self, OwnershipError> {
        Self::take_in(&runtime_folder(), address)
    }

    /// Takes the link, with its lock file in the given folder.
    ///
    /// # Errors
    /// See [`OwnershipError`].
    pub fn take_in(folder: &Path, address: &Address) -> Result<Self, OwnershipError> {
        let path = folder.join(file_name(&resolved(address)));
        let failed = |source| OwnershipError::File {
            path: path.clone(),
            source,
        };
        let mut file = open(folder, &path).map_err(failed)?;
        match file.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => {
                let mut owner = String::new();
                let _ = file.read_to_string(&mut owner);
                return Err(OwnershipError::Owned {
                    link: address.to_string(),
                    owner: match owner.trim() {
                        "" => "unknown".to_owned(),
                        owner => owner.to_owned(),
                    },
                });
            }
            Err(TryLockError::Error(source)) => return Err(failed(source)),
        }
        write_owner(&mut file).map_err(failed)?;
        Ok(Self { file })
    }

    /// The open lock file, for a child process that shares the ownership.
    pub fn file(&self) -> &File {
        &self.file
    }
}

/// `/run/lock` where it is there (one for all users), else the folder for temporary files.
pub fn runtime_folder() -> PathBuf {
    let shared = Path::new("/run/lock");
    let root =
        if shared.is_dir() && rustix::fs::access(shared, rustix::fs::Access::WRITE_OK).is_ok() {
            shared.to_owned()
        } else {
            std::env::temp_dir()
        };
    root.join("darkline")
}

fn open(folder: &Path, path: &Path) -> io::Result<File> {
    if !folder.is_dir() {
        fs::create_dir_all(folder)?;
        // Another user's program must see our lock; both may fail where the folder is another's already.
        let _ = fs::set_permissions(folder, fs::Permissions::from_mode(0o1777));
    }
    let existing = OpenOptions::new().read(true).write(true).open(path);
    match existing {
        Err(error) if error.kind() == io::ErrorKind::NotFound => {
            let file = OpenOptions::new()
                .read(true)
                .write(true)
                .create(true)
                .truncate(false)
                .mode(0o666)
                .open(path)?;
            let _ = file.set_permissions(fs::Permissions::from_mode(0o666));
            Ok(file)
        }
        other => other,
    }
}

fn write_owner(file: &mut File) -> io::Result<()> {
    file.set_len(0)?;
    file.rewind()?;
    write!(file, "{}", std::process::id())?;
    file.flush()
}

/// The same text for every way to write the same link: `/dev/serial/by-id/…` and `/dev/ttyUSB0`,
/// `localhost` and `127.0.0.1`.
fn resolved(address: &Address) -> String {
    match address {
        Address::Serial { device, .. } => {
            let real = fs::canonicalize(device).unwrap_or_else(|_| device.clone());
            format!("serial {}", real.display())
        }
        Address::Tcp { host, port } => {
            let number = (host.as_str(), *port)
                .to_socket_addrs()
                .ok()
                .and_then(|mut found| {
                    let first = found.next()?;
                    // Both families of one host are one instrument: prefer IPv4 where there is one.
                    Some(
                        found
                            .find(|next| first.is_ipv6() && next.is_ipv4())
                            .unwrap_or(first),
                    )
                });
            match number {
                Some(number) if number.ip().is_loopback() => format!("tcp loopback {port}"),
                Some(number) => format!("tcp {} {port}", number.ip()),
                None => format!("tcp {host} {port}"),
            }
        }
    }
}

/// Letters and digits stand for themselves, anything else for its number, so that no two links share one.
fn file_name(link: &str) -> String {
    let mut name = String::new();
    for byte in link.bytes() {
        match byte {
            b'a'..=b'z' | b'A'..=b'Z' | b'0'..=b'9' | b'.' => name.push(char::from(byte)),
            _ => name.push_str(&format!("_{byte:02x}")),
        }
    }
    name + ".lock"
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_second_owner_is_refused_by_name() {
        let folder = tempfile::tempdir().unwrap();
        let address: Address = "tcp://127.0.0.1:5025".parse().unwrap();
        let same: Address = "TCPIP0::localhost::5025::SOCKET".parse().unwrap();
        let other: Address = "tcp://127.0.0.1:5026".parse().unwrap();
        let first = Ownership::take_in(folder.path(), &address).unwrap();
        let refusal = Ownership::take_in(folder.path(), &same).unwrap_err();
        let owner = std::process::id().to_string();
        assert!(refusal.to_string().contains(&owner), "{refusal}");
        Ownership::take_in(folder.path(), &other).unwrap();
        drop(first);
        Ownership::take_in(folder.path(), &address).unwrap();
    }

    #[test]
    fn a_file_left_behind_is_no_obstacle() {
        let folder = tempfile::tempdir().unwrap();
        let address: Address = "serial:///dev/ttyNone".parse().unwrap();
        let path = folder.path().join(file_name(&resolved(&address)));
        fs::write(&path, "999999999 and more than that").unwrap();
        let ours = Ownership::take_in(folder.path(), &address).unwrap();
        assert_eq!(
            fs::read_to_string(&path).unwrap(),
            std::process::id().to_string()
        );
        drop(ours);
    }

    #[test]
    fn two_names_of_one_line_are_one_link() {
        let folder = tempfile::tempdir().unwrap();
        let device = folder.path().join("line");
        fs::write(&device, "").unwrap();
        let alias = folder.path().join("by-id");
        std::os::unix::fs::symlink(&device, &alias).unwrap();
        let written =
            |path: &Path| -> Address { format!("serial://{}", path.display()).parse().unwrap() };
        let _first = Ownership::take_in(folder.path(), &written(&device)).unwrap();
        assert!(Ownership::take_in(folder.path(), &written(&alias)).is_err());
    }
}
