//! The mock bench on its own: serves every instrument and says where, until it is told to end.

use std::io::{self, Write};

use tokio::time::Instant;

use crate::bench::{Endpoint, MockBench, Options};
use crate::fault::TimedFault;
use crate::world::World;

/// Why the bench could not be served.
#[derive(Debug, thiserror::Error)]
pub enum ServeError {
    /// No port or pseudo-terminal could be had.
    #[error("the mock bench cannot be served: {0}; it needs free ports on 127.0.0.1 and /dev/ptmx")]
    Listen(#[source] io::Error),
    /// Where it listens could not be told.
    #[error("cannot tell where the mock bench listens: {0}")]
    Tell(#[source] io::Error),
}

/// Serves the bench, tells where on `out` (one line per instrument, or one JSON object), and runs until `end`
/// resolves. With `--json` the object is `{"instruments": [{"name", "role", "address"}, ...]}` on one line.
pub async fn serve_forever(
    world: World,
    options: Options,
    faults: Vec<TimedFault>,
    json: bool,
    out: &mut (dyn Write + Send),
    end: impl Future<Output = ()>,
) -> Result<(), ServeError> {
    let bench = MockBench::with_options(world, Instant::now(), options);
    let endpoints = bench.serve().await.map_err(ServeError::Listen)?;
    faults.into_iter().for_each(|fault| bench.schedule(fault));
    tell(&endpoints, json, out).map_err(ServeError::Tell)?;
    end.await;
    Ok(())
}

#[derive(serde::Serialize)]
struct Listing<'a> {
    instruments: &'a [Endpoint],
}

fn tell(endpoints: &[Endpoint], json: bool, out: &mut dyn Write) -> io::Result<()> {
    if json {
        serde_json::to_writer(
            &mut *out,
            &Listing {
                instruments: endpoints,
            },
        )?;
        writeln!(out)?;
    } else {
        for endpoint in endpoints {
            writeln!(
                out,
                "{:8} {:38} {}",
                endpoint.name, endpoint.address, endpoint.role
            )?;
        }
    }
    out.flush()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn listing_for_people_and_for_programs() {
        let endpoints = [Endpoint {
            name: "scope",
            role: "digitizer",
            address: "tcp://127.0.0.1:5025".to_owned(),
        }];
        let mut text = Vec::new();
        tell(&endpoints, false, &mut text).unwrap();
        let text = String::from_utf8(text).unwrap();
        assert!(
            text.starts_with("scope ") && text.trim_end().ends_with("digitizer"),
            "{text}"
        );
        let mut json = Vec::new();
        tell(&endpoints, true, &mut json).unwrap();
        let read: serde_json::Value = serde_json::from_slice(&json).unwrap();
        assert_eq!(read["instruments"][0]["address"], "tcp://127.0.0.1:5025");
    }
}
