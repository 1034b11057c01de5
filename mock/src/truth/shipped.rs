//! The truth of the shipped world, as code: what a world file leaves out is taken from here. `mock/world.toml` says
//! the same, and a test holds the two against each other.

use super::*;

pub(super) fn truth() -> Truth {
    Truth {
        seed: 1,
        atom: AtomTruth {
            level: Level::RB87_F2,
            handedness: 1.0,
            pair_asymmetry: 0.0,
            polarisation_leak: 0.0,
        },
        coil: coil(),
        field: FieldTruth {
            residual: 212e-9,
            transverse: 340e-9,
            drift: 0.0,
            mains: 0.0,
            mains_frequency: 50.0,
        },
        cell: CellTruth {
            length: 25e-3,
            share: 0.625,
            temperature: 333.15,
            oven_time: 60.0,
            sensor_offset: 0.0,
            sensor_noise: 2e-3,
        },
        line: LineTruth::Bloch(BlochTruth {
            natural_width: 5.75e6,
            optical_dephasing: 50e6,
            transit: 2.3e3,
            ground_decoherence: 0.5e3,
            sink_branching: 1.0 / 6.0,
            strength: 0.5,
            probe_rabi: 0.05e6,
            control_rabi: 0.5e6,
        }),
        laser: LaserTruth {
            detuning: 0.0,
            jitter: 0.0,
            jitter_time: 1e-3,
            pull: -41e-6,
            light_shift: 0.0,
        },
        probe: BeamTruth {
            level: -3.0,
            full_level: 3.0,
            centre: 80e6,
            slope: 0.0,
            curvature: 0.0,
        },
        control: BeamTruth {
            level: 0.0,
            full_level: 3.0,
            centre: 80e6,
            slope: 0.0,
            curvature: 0.0,
        },
        detector: detector(),
        lock: LockTruth {
            level: 0.6,
            noise: 5e-3,
            losses: Vec::new(),
            rate: 0.0,
            duration: 2.0,
            transmission: 0.9,
        },
        room_temperature: 294.15,
    }
}

fn coil() -> CoilTruth {
    CoilTruth {
        constant: 118.6e-6,
        resistance: 8.0,
        inductance: 0.71e-3,
        supply_lag: 2e-3,
        expansion: 17e-6,
        heating: 5.0,
        thermal_time: 120.0,
        inhomogeneity: 0.0,
        eddy_share: 0.0,
        eddy_time: 20e-3,
        hysteresis_width: 0.0,
        hysteresis_constant: 0.0,
        supply_limit: 0.1,
        readback_gain_error: 0.0,
        readback_offset: 0.0,
        readback_noise: 1e-6,
    }
}

fn detector() -> DetectorTruth {
    DetectorTruth {
        full_scale: 1.0,
        reference_full_scale: 1.0,
        dark: 2e-3,
        leakage: 0.0,
        lag: 5e-6,
        transimpedance: 1e5,
        white: 12e-6,
        corner: 0.0,
        intensity_noise: 0.0,
        pickup: 0.0,
    }
}
