//! What a driver's query costs over loopback TCP, beside a bare blocking ping-pong in the same run.
//!
//! Prints a table of medians and their ratio; it asserts nothing, since a machine may be busy.

use std::io::{self, BufRead, BufReader, Read, Write};
use std::net::{TcpListener, TcpStream};
use std::thread;
use std::time::Instant;

use darkline_drivers::exchange::{Exchange, Manners};
use darkline_drivers::link::Address;

const ROUNDS: usize = 20;
const QUERIES: usize = 2_000;
const QUESTION: &str = "MEAS:CURR?";
const ANSWER: &[u8] = b"2.03000000000000E-02\n";

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let (mut bare, mut driver) = (Vec::new(), Vec::new());
    let runtime = tokio::runtime::Builder::new_current_thread()
        .enable_all()
        .build()?;
    // In turns, so that what else the machine does falls on both.
    for _ in 0..ROUNDS {
        bare.extend(ping_pong(serve()?)?);
        driver.extend(runtime.block_on(queries(serve()?))?);
    }
    let (bare, driver) = (Quantiles::of(bare), Quantiles::of(driver));
    println!(
        "{:<34} {:>9} {:>9} {:>9}",
        "loopback TCP, us", "p10", "median", "p90"
    );
    bare.print("bare blocking ping-pong");
    driver.print("driver query");
    println!(
        "{:<34} {:>9.2} {:>9.2} {:>9.2}",
        "ratio",
        driver.low / bare.low,
        driver.median / bare.median,
        driver.high / bare.high
    );
    Ok(())
}

/// An instrument of one answer, on a thread of its own.
fn serve() -> io::Result<u16> {
    let listener = TcpListener::bind("127.0.0.1:0")?;
    let port = listener.local_addr()?.port();
    thread::spawn(move || -> io::Result<()> {
        let (stream, _) = listener.accept()?;
        stream.set_nodelay(true)?;
        let mut lines = BufReader::new(stream.try_clone()?);
        let mut stream = stream;
        let mut line = Vec::new();
        while lines.read_until(b'\n', &mut line)? > 0 {
            stream.write_all(ANSWER)?;
            line.clear();
        }
        Ok(())
    });
    Ok(port)
}

fn ping_pong(port: u16) -> io::Result<Vec<f64>> {
    let mut stream = TcpStream::connect(("127.0.0.1", port))?;
    stream.set_nodelay(true)?;
    let question = format!("{QUESTION}\n");
    let mut answer = vec![0; ANSWER.len()];
    let mut times = Vec::with_capacity(QUERIES);
    for _ in 0..QUERIES {
        let begun = Instant::now();
        stream.write_all(question.as_bytes())?;
        stream.read_exact(&mut answer)?;
        times.push(begun.elapsed().as_secs_f64() * 1e6);
    }
    Ok(times)
}

async fn queries(port: u16) -> Result<Vec<f64>, Box<dyn std::error::Error>> {
    let address: Address = format!("tcp://127.0.0.1:{port}").parse()?;
    let mut exchange = Exchange::new("bench", Box::new(address), Manners::default());
    exchange.connect().await?;
    let mut times = Vec::with_capacity(QUERIES);
    for _ in 0..QUERIES {
        let begun = Instant::now();
        let reply = exchange.ask(&[QUESTION]).await?;
        times.push(begun.elapsed().as_secs_f64() * 1e6);
        assert_eq!(reply.bytes().len() + 1, ANSWER.len());
    }
    Ok(times)
}

struct Quantiles {
    low: f64,
    median: f64,
    high: f64,
}

impl Quantiles {
    fn of(mut times: Vec<f64>) -> Self {
        times.sort_by(f64::total_cmp);
        let at = |share: usize| {
            times
                .get(times.len() * share / 100)
                .copied()
                .unwrap_or(f64::NAN)
        };
        Self {
            low: at(10),
            median: at(50),
            high: at(90),
        }
    }

    fn print(&self, name: &str) {
        println!(
            "{name:<34} {:>9.2} {:>9.2} {:>9.2}",
            self.low, self.median, self.high
        );
    }
}
