//! The mock bench from outside: what a client on the wire sees. Knows the SCPI text only, nothing of the engine.

#![expect(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "a test client"
)]

mod digitizer;
mod faults;
mod instruments;
mod language;
mod links;

use darkline_mock::world::{Truth, World};
use darkline_mock::{MockBench, Options};
use tokio::io::{AsyncRead, AsyncReadExt, AsyncWrite, AsyncWriteExt, DuplexStream};

/// A client that speaks lines.
pub(crate) struct Client<S = DuplexStream>(pub(crate) S);

impl<S: AsyncRead + AsyncWrite + Unpin> Client<S> {
    pub(crate) async fn say(&mut self, text: &str) {
        self.0
            .write_all(format!("{text}\n").as_bytes())
            .await
            .unwrap();
    }

    pub(crate) async fn line(&mut self) -> String {
        let mut line = Vec::new();
        loop {
            let byte = self
                .0
                .read_u8()
                .await
                .expect("the link ended within a line");
            if byte == b'\n' {
                return String::from_utf8(line).expect("a line of text");
            }
            line.push(byte);
        }
    }

    pub(crate) async fn ask(&mut self, text: &str) -> String {
        self.say(text).await;
        self.line().await
    }

    pub(crate) async fn number(&mut self, text: &str) -> f64 {
        let answer = self.ask(text).await;
        answer
            .parse()
            .unwrap_or_else(|_| panic!("{text} answered {answer}"))
    }

    /// The data of a definite block, its terminator checked.
    pub(crate) async fn block(&mut self, text: &str) -> Vec<u8> {
        self.say(text).await;
        assert_eq!(self.0.read_u8().await.unwrap(), b'#');
        let digits = usize::from(self.0.read_u8().await.unwrap() - b'0');
        let mut length = vec![0; digits];
        self.0.read_exact(&mut length).await.unwrap();
        let length: usize = String::from_utf8(length).unwrap().parse().unwrap();
        let mut data = vec![0; length];
        self.0.read_exact(&mut data).await.unwrap();
        assert_eq!(self.0.read_u8().await.unwrap(), b'\n');
        data
    }

    /// The number of the oldest error.
    pub(crate) async fn error(&mut self) -> i32 {
        let answer = self.ask("SYST:ERR?").await;
        answer.split(',').next().unwrap().parse().unwrap()
    }
}

pub(crate) fn truth(seed: u64) -> Truth {
    Truth {
        seed,
        ..Truth::shipped()
    }
}

pub(crate) fn bench() -> MockBench {
    MockBench::new(World::new(truth(1)), tokio::time::Instant::now())
}

pub(crate) fn bench_with(truth: Truth, options: Options) -> MockBench {
    MockBench::with_options(World::new(truth), tokio::time::Instant::now(), options)
}

pub(crate) fn client(bench: &MockBench, name: &str) -> Client {
    Client(bench.connect(name).expect("a known, reachable instrument"))
}
