//! From the text of a world file to a truth: which key is which number, and what range it may have.

use super::section::Section;
use super::units::*;
use super::*;
use darkline_core::atom::breit_rabi::Species;
use toml::de::DeTable;

const INF: f64 = f64::MAX;

type Fill<'f> = &'f dyn Fn(&mut Section<'_>, &mut Truth);

/// Reads the whole file over the shipped truth.
pub(super) fn read(text: &str) -> Result<Truth, WorldFileError> {
    let table = DeTable::parse(text).map_err(|error| WorldFileError {
        message: error.to_string(),
    })?;
    let mut truth = Truth::shipped();
    let mut top = Section::new("", table.get_ref(), text);
    let mut faults = Vec::new();
    if let Some(seed) = top.whole("seed", i64::MAX as u64) {
        truth.seed = seed;
    }
    top.quantities([(
        "room_temperature",
        TEMPERATURE,
        250.0,
        350.0,
        &mut truth.room_temperature,
    )]);
    let sections: [(&'static str, Fill<'_>); 10] = [
        ("atom", &|s, t| atom(s, &mut t.atom)),
        ("coil", &|s, t| coil(s, &mut t.coil)),
        ("field", &|s, t| field(s, &mut t.field)),
        ("cell", &|s, t| cell(s, &mut t.cell)),
        ("line", &|s, t| line(s, &mut t.line)),
        ("laser", &|s, t| laser(s, &mut t.laser)),
        ("probe", &|s, t| beam(s, &mut t.probe)),
        ("control", &|s, t| beam(s, &mut t.control)),
        ("detector", &|s, t| detector(s, &mut t.detector)),
        ("lock", &|s, t| lock(s, &mut t.lock, text)),
    ];
    for (name, fill) in sections {
        if let Some(table) = top.table(name) {
            let mut section = Section::new(name, table, text);
            fill(&mut section, &mut truth);
            faults.extend(section.finish());
        }
    }
    // Faults are no part of the truth: `crate::fault` reads them from the same file.
    let _ = top.tables("fault");
    faults.extend(top.finish());
    if faults.is_empty() {
        Ok(truth)
    } else {
        Err(WorldFileError {
            message: faults.join("\n"),
        })
    }
}

fn atom(s: &mut Section<'_>, t: &mut AtomTruth) {
    const SPECIES: [&str; 2] = ["87Rb", "85Rb"];
    let species = s
        .word("species", &SPECIES)
        .and_then(|n| Species::named(SPECIES[n]));
    let species = species.unwrap_or(t.level.species());
    let f = s.whole("level", 3).map_or(t.level.f(), |f| f as u8);
    match Level::new(species, f) {
        Some(level) => t.level = level,
        None => s.faults.push(format!(
            "`atom.level` {f} is not a ground level of {species:?}; 87Rb has 1, 2; 85Rb 2, 3"
        )),
    }
    if let Some(word) = s.word("probe", &["sigma+", "sigma-"]) {
        t.handedness = if word == 0 { 1.0 } else { -1.0 };
    }
    s.quantities([
        ("pair_asymmetry", PLAIN, -1.0, 1.0, &mut t.pair_asymmetry),
        (
            "polarisation_leak",
            PLAIN,
            0.0,
            1.0,
            &mut t.polarisation_leak,
        ),
    ]);
}

fn coil(s: &mut Section<'_>, t: &mut CoilTruth) {
    s.quantities([
        ("constant", FIELD_PER_CURRENT, -1.0, 1.0, &mut t.constant),
        ("resistance", RESISTANCE, 1e-3, 1e6, &mut t.resistance),
        ("inductance", INDUCTANCE, 0.0, 10.0, &mut t.inductance),
        ("supply_lag", TIME, 0.0, 10.0, &mut t.supply_lag),
        ("expansion", EXPANSION, -0.01, 0.01, &mut t.expansion),
        ("heating", WARMING, 0.0, 1e4, &mut t.heating),
        ("thermal_time", TIME, 0.0, 1e6, &mut t.thermal_time),
        ("inhomogeneity", PLAIN, 0.0, 1.0, &mut t.inhomogeneity),
        ("eddy_share", PLAIN, 0.0, 1.0, &mut t.eddy_share),
        ("eddy_time", TIME, 0.0, 100.0, &mut t.eddy_time),
        (
            "hysteresis_width",
            CURRENT,
            0.0,
            100.0,
            &mut t.hysteresis_width,
        ),
        (
            "hysteresis_constant",
            FIELD_PER_CURRENT,
            -1.0,
            1.0,
            &mut t.hysteresis_constant,
        ),
        ("supply_limit", CURRENT, 0.0, 100.0, &mut t.supply_limit),
        (
            "readback_gain_error",
            PLAIN,
            -0.5,
            0.5,
            &mut t.readback_gain_error,
        ),
        (
            "readback_offset",
            CURRENT,
            -1.0,
            1.0,
            &mut t.readback_offset,
        ),
        ("readback_noise", CURRENT, 0.0, 1.0, &mut t.readback_noise),
    ]);
}

fn field(s: &mut Section<'_>, t: &mut FieldTruth) {
    s.quantities([
        ("residual", FIELD, -1e-2, 1e-2, &mut t.residual),
        ("transverse", FIELD, 0.0, 1e-2, &mut t.transverse),
        ("drift", FIELD_PER_TIME, -1e-6, 1e-6, &mut t.drift),
        ("mains", FIELD, 0.0, 1e-4, &mut t.mains),
        (
            "mains_frequency",
            FREQUENCY,
            10.0,
            1000.0,
            &mut t.mains_frequency,
        ),
    ]);
}

fn cell(s: &mut Section<'_>, t: &mut CellTruth) {
    s.quantities([
        ("length", LENGTH, 1e-5, 1.0, &mut t.length),
        ("share", PLAIN, 0.0, 1.0, &mut t.share),
        (
            "temperature",
            TEMPERATURE,
            273.15,
            473.15,
            &mut t.temperature,
        ),
        ("oven_time", TIME, 0.0, 1e6, &mut t.oven_time),
        (
            "sensor_offset",
            TEMPERATURE_DIFFERENCE,
            -20.0,
            20.0,
            &mut t.sensor_offset,
        ),
        (
            "sensor_noise",
            TEMPERATURE_DIFFERENCE,
            0.0,
            10.0,
            &mut t.sensor_noise,
        ),
    ]);
}

fn line(s: &mut Section<'_>, t: &mut LineTruth) {
    if s.word("kind", &["bloch", "lorentzian"]) == Some(1) {
        *t = LineTruth::Lorentzian {
            fwhm: 6e3,
            contrast: 0.08,
            base: 0.5,
        };
    }
    match t {
        LineTruth::Lorentzian {
            fwhm,
            contrast,
            base,
        } => s.quantities([
            ("fwhm", FREQUENCY, 1.0, 1e7, fwhm),
            ("contrast", PLAIN, 0.0, 0.99, contrast),
            ("base", PLAIN, 0.0, 1.0, base),
        ]),
        LineTruth::Bloch(t) => s.quantities([
            ("natural_width", FREQUENCY, 1e5, 1e8, &mut t.natural_width),
            (
                "optical_dephasing",
                FREQUENCY,
                0.0,
                1e10,
                &mut t.optical_dephasing,
            ),
            ("transit", FREQUENCY, 1.0, 1e7, &mut t.transit),
            (
                "ground_decoherence",
                FREQUENCY,
                0.0,
                1e7,
                &mut t.ground_decoherence,
            ),
            ("sink_branching", PLAIN, 0.0, 0.99, &mut t.sink_branching),
            ("strength", PLAIN, 0.0, 10.0, &mut t.strength),
            ("probe_rabi", FREQUENCY, 1.0, 1e8, &mut t.probe_rabi),
            ("control_rabi", FREQUENCY, 0.0, 1e8, &mut t.control_rabi),
        ]),
    }
}

fn laser(s: &mut Section<'_>, t: &mut LaserTruth) {
    s.quantities([
        ("detuning", FREQUENCY, -2e9, 2e9, &mut t.detuning),
        ("jitter", FREQUENCY, 0.0, 1e9, &mut t.jitter),
        ("jitter_time", TIME, 1e-9, 1e3, &mut t.jitter_time),
        ("pull", PULL, -1.0, 1.0, &mut t.pull),
        ("light_shift", LIGHT_SHIFT, -1e-6, 1e-6, &mut t.light_shift),
    ]);
}

fn beam(s: &mut Section<'_>, t: &mut BeamTruth) {
    s.quantities([
        ("level", LEVEL, -150.0, 40.0, &mut t.level),
        ("full_level", LEVEL, -100.0, 60.0, &mut t.full_level),
        ("centre", FREQUENCY, 1e6, 1e10, &mut t.centre),
        ("slope", SLOPE, -1e-3, 1e-3, &mut t.slope),
        ("curvature", CURVATURE, -1e-6, 1e-6, &mut t.curvature),
    ]);
}

fn detector(s: &mut Section<'_>, t: &mut DetectorTruth) {
    s.quantities([
        ("full_scale", VOLTAGE, 0.0, 1e3, &mut t.full_scale),
        (
            "reference_full_scale",
            VOLTAGE,
            0.0,
            1e3,
            &mut t.reference_full_scale,
        ),
        ("dark", VOLTAGE, -10.0, 10.0, &mut t.dark),
        ("leakage", VOLTAGE, 0.0, 1e3, &mut t.leakage),
        ("lag", TIME, 0.0, 1.0, &mut t.lag),
        (
            "transimpedance",
            TRANSIMPEDANCE,
            0.0,
            1e12,
            &mut t.transimpedance,
        ),
        ("white", NOISE, 0.0, 1.0, &mut t.white),
        ("corner", FREQUENCY, 0.0, 1e6, &mut t.corner),
        ("intensity_noise", PLAIN, 0.0, 1.0, &mut t.intensity_noise),
        ("pickup", VOLTAGE, 0.0, 100.0, &mut t.pickup),
    ]);
}

fn lock(s: &mut Section<'_>, t: &mut LockTruth, text: &str) {
    s.quantities([
        ("level", VOLTAGE, 0.0, 100.0, &mut t.level),
        ("noise", VOLTAGE, 0.0, 10.0, &mut t.noise),
        ("rate", RATE, 0.0, 10.0, &mut t.rate),
        ("duration", TIME, 0.0, 1e6, &mut t.duration),
        ("transmission", PLAIN, 0.0, 1.0, &mut t.transmission),
    ]);
    for table in s.tables("loss").unwrap_or_default() {
        let mut loss = (f64::NAN, f64::NAN);
        let mut section = Section::new("lock.loss", table, text);
        section.quantities([
            ("at", TIME, 0.0, INF, &mut loss.0),
            ("for", TIME, 0.0, INF, &mut loss.1),
        ]);
        let mut faults = section.finish();
        if faults.is_empty() && (loss.0.is_nan() || loss.1.is_nan()) {
            faults.push("`lock.loss` needs both `at` and `for`".to_owned());
        }
        s.faults.extend(faults);
        t.losses.push(loss);
    }
}
