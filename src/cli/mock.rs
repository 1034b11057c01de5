//! `darkline mock`: serves the mock bench for any SCPI client until told to end. Holds no physics.

use std::path::Path;

use darkline_mock::world::{Truth, World};
use tokio::io::AsyncReadExt;

use super::Exit;
use super::arguments::MockOptions;
use super::diagnostics;

/// The world that is served where none is named.
const SHIPPED_WORLD: &str = include_str!("../../mock/world.toml");

/// Runs `mock`.
pub async fn run(options: &MockOptions) -> Exit {
    let text = match read_world(options.world.as_deref()) {
        Ok(text) => text,
        Err(message) => {
            diagnostics::show_error(&message);
            return Exit::WrongFile;
        }
    };
    let name = options
        .world
        .as_deref()
        .map_or("the shipped world".to_owned(), |path| {
            path.display().to_string()
        });
    let truth = match Truth::parse(&text) {
        Ok(truth) => truth,
        Err(error) => {
            diagnostics::show_error(&format!("{name}: {error}"));
            return Exit::WrongFile;
        }
    };
    let faults = match darkline_mock::fault::faults_of_world_file(&text) {
        Ok(faults) => faults,
        Err(error) => {
            diagnostics::show_error(&format!("{name}: {error}"));
            return Exit::WrongFile;
        }
    };
    let served = darkline_mock::serve_forever(
        World::new(truth),
        darkline_mock::Options::default(),
        faults,
        options.json,
        &mut std::io::stdout(),
        end(options.with_parent),
    )
    .await;
    match served {
        Ok(()) => Exit::Finished,
        Err(error) => {
            diagnostics::show_error(&error.to_string());
            Exit::Fault
        }
    }
}

fn read_world(path: Option<&Path>) -> Result<String, String> {
    match path {
        None => Ok(SHIPPED_WORLD.to_owned()),
        Some(path) => std::fs::read_to_string(path)
            .map_err(|error| format!("cannot read the world file {}: {error}", path.display())),
    }
}

/// Resolves when the bench is to end: at a signal, or with the parent whose child it is.
async fn end(with_parent: bool) {
    let Ok(mut asks) = super::signals::listen() else {
        return;
    };
    let parent_gone = async {
        if !with_parent {
            return std::future::pending().await;
        }
        // The parent never writes: its pipe ends when it does, however it does.
        let mut nothing = [0; 64];
        while matches!(tokio::io::stdin().read(&mut nothing).await, Ok(read) if read > 0) {}
    };
    tokio::select! {
        _ = asks.recv() => {}
        () = parent_gone => {}
    }
}
