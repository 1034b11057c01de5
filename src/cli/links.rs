//! Where the instruments of a command are reached: the bench file's links, a links file's, or a mock
//! bench started as a child. Opens no link itself.

use std::collections::BTreeMap;
use std::path::Path;
use std::process::Stdio;

use serde::{Deserialize, Serialize};
use tokio::io::{AsyncBufReadExt, BufReader};
use tokio::process::{Child, Command};

/// Where instruments listen, in place of the bench file's links: what `darkline mock --json` prints.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Links {
    /// One line per instrument.
    pub instruments: Vec<Listener>,
}

/// Where one instrument listens.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Listener {
    /// Its name in the bench file.
    pub name: String,
    /// What it is to the bench.
    #[serde(default)]
    pub role: String,
    /// Its address, such as `tcp://127.0.0.1:5025`.
    pub address: String,
}

impl Links {
    /// Address by instrument name.
    pub fn by_name(&self) -> BTreeMap<String, String> {
        self.instruments
            .iter()
            .map(|one| (one.name.clone(), one.address.clone()))
            .collect()
    }
}

/// A mock bench in a process of its own. It ends when this value is dropped or this process dies.
#[derive(Debug)]
pub struct MockChild {
    /// Held for its standard input: its end tells the child that the parent is gone.
    _child: Child,
}

/// The links of a command, and the mock bench that must live as long as they are used.
#[derive(Debug, Default)]
pub struct Reached {
    /// `None` where the bench file's own links stand.
    pub links: Option<Links>,
    /// The mock bench, where one was started; held for as long as its instruments are needed.
    _mock: Option<MockChild>,
}

impl Reached {
    /// Settles how the bench is reached, starting the mock bench where `mock` asks for it.
    ///
    /// # Errors
    /// One line for the user: an unreadable links file, a wrong world file, a mock that does not start.
    pub async fn settle(mock: Option<Option<&Path>>, links: Option<&Path>) -> Result<Self, String> {
        if let Some(world) = mock {
            let (child, links) = start_mock(world).await?;
            return Ok(Self {
                links: Some(links),
                _mock: Some(child),
            });
        }
        let links = links.map(read_links).transpose()?;
        Ok(Self { links, _mock: None })
    }
}

fn read_links(path: &Path) -> Result<Links, String> {
    let text = std::fs::read_to_string(path)
        .map_err(|error| format!("cannot read the links file {}: {error}", path.display()))?;
    serde_json::from_str(&text).map_err(|error| {
        format!(
            "{} is no links file: {error}; write it with `darkline mock --json`",
            path.display()
        )
    })
}

/// Starts `darkline mock` as a child. It has a process group of its own, so that a Ctrl-C typed at
/// the scan does not take the instruments away before they are at rest.
async fn start_mock(world: Option<&Path>) -> Result<(MockChild, Links), String> {
    let mut command = Command::new("/proc/self/exe");
    command.args(["mock", "--json", "--with-parent"]);
    if let Some(world) = world {
        command.arg("--world").arg(world);
    }
    let mut child = command
        .process_group(0)
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .kill_on_drop(true)
        .spawn()
        .map_err(|error| format!("cannot start the mock bench: {error}"))?;
    let Some(output) = child.stdout.take() else {
        return Err("cannot start the mock bench: it has no output".to_owned());
    };
    let mut line = String::new();
    let read = BufReader::new(output).read_line(&mut line).await;
    if !matches!(read, Ok(length) if length > 0) {
        return Err("the mock bench did not start; its own message stands above".to_owned());
    }
    let links = serde_json::from_str(&line)
        .map_err(|error| format!("the mock bench did not say where it listens: {error}"))?;
    Ok((MockChild { _child: child }, links))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_links_file_is_what_the_mock_prints() {
        let links = Links {
            instruments: vec![Listener {
                name: "coil".to_owned(),
                role: "current-supply".to_owned(),
                address: "tcp://127.0.0.1:5025".to_owned(),
            }],
        };
        let text = serde_json::to_string(&links).unwrap();
        assert_eq!(serde_json::from_str::<Links>(&text).unwrap(), links);
    }

    #[test]
    fn a_foreign_file_is_refused_with_the_remedy() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("links.json");
        std::fs::write(&path, "{\"coil\": 5}").unwrap();
        let message = read_links(&path).unwrap_err();
        assert!(message.contains("darkline mock --json"), "{message}");
    }
}
