//! Prints what the simulated world costs: building a table, recording a trace. Figures for DEVELOPERS.md, no test.

use darkline_mock::world::{Beam, BeamState, Sweep, Truth, World};
use std::time::Instant;

fn main() {
    let truth = Truth::shipped();
    println!("{:<34}{:>12}", "what", "time");
    for (name, truth) in [
        ("shipped (Bloch table)", truth.clone()),
        ("drawn (Lorentzian)", Truth::seeded(1).truth),
    ] {
        let mut world = World::new(truth.clone());
        world.set_coil_output(0.0, true);
        world.set_coil_current(0.0, 10e-3);
        for (beam, level) in [
            (Beam::Probe, truth.probe.level),
            (Beam::Control, truth.control.level),
        ] {
            world.set_beam(
                0.0,
                beam,
                BeamState {
                    frequency: 80e6,
                    power: level,
                    on: true,
                },
            );
        }
        let sweep = Sweep {
            start: 79.95e6,
            stop: 80.05e6,
            duration: 0.04,
            steps: Some(2000),
        };
        world.start_sweep(10.0, Beam::Probe, sweep);
        let mut volts = vec![0.0; 2000];
        let first = Instant::now();
        world.record(1, 0, 10.0, 2e-5, &mut volts);
        println!(
            "{:<34}{:>9.0} us",
            format!("{name}: first record"),
            first.elapsed().as_secs_f64() * 1e6
        );
        for channel in 1..=3u8 {
            let rounds = 500u32;
            let start = Instant::now();
            for acquisition in 0..rounds {
                world.record(channel, u64::from(acquisition), 10.0, 2e-5, &mut volts);
            }
            let each = start.elapsed().as_secs_f64() * 1e6 / f64::from(rounds);
            println!(
                "{:<34}{each:>9.0} us",
                format!("{name}: channel {channel}, 2000 samples")
            );
        }
        println!(
            "{:<34}{:>9.1} Hz",
            format!("{name}: linewidth"),
            world.true_linewidth(10.0)
        );
        println!(
            "{:<34}{:>12.5}",
            format!("{name}: contrast"),
            world.true_contrast(10.0)
        );
    }
}
