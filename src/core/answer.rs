//! What a run answers: each number with its uncertainty, or the reason why there is none.
//! Holds and words the answer; never computes it (see `fit`) and never prints it (see the daemon's `report`).

use serde::{Deserialize, Serialize};

/// One number as a physicist would state it, in the unit named beside it.
///
/// Exactly one of three forms: a value with its sigma, an upper limit, or neither with a reason.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct Stated {
    /// Best value, in `unit`; `None` where the data do not give one.
    pub value: Option<f64>,
    /// Statistical standard uncertainty of `value`, in `unit`.
    pub sigma: Option<f64>,
    /// Systematic standard uncertainty of `value`, in `unit`; `None` where no budget was declared.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub systematic: Option<f64>,
    /// Unit of all numbers here, as printed: `nT/mA`, `nT`, `mA`, `kHz`, `%`.
    pub unit: String,
    /// Upper limit at 95 % confidence, in `unit`, where that is the answer.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub upper_limit: Option<f64>,
    /// Why there is no value, in a few words.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub reason: Option<String>,
    /// Where or how the number holds, such as `at -2.0 mA` or `including light shift`.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub qualifier: Option<String>,
}

impl Stated {
    /// A value with its statistical sigma, both in `unit`.
    pub fn measured(value: f64, sigma: f64, unit: &str) -> Self {
        Self {
            value: Some(value),
            sigma: Some(sigma),
            unit: unit.to_owned(),
            ..Self::default()
        }
    }

    /// No value: `reason` says why, in a few words.
    pub fn missing(reason: impl Into<String>, unit: &str) -> Self {
        Self {
            reason: Some(reason.into()),
            unit: unit.to_owned(),
            ..Self::default()
        }
    }

    /// An upper limit at 95 % confidence, in `unit`.
    pub fn limit(upper_limit: f64, unit: &str) -> Self {
        Self {
            upper_limit: Some(upper_limit),
            reason: Some("consistent with zero; upper limit at 95 % confidence".to_owned()),
            unit: unit.to_owned(),
            ..Self::default()
        }
    }

    /// The same statement with a qualifier.
    pub fn qualified(mut self, qualifier: impl Into<String>) -> Self {
        self.qualifier = Some(qualifier.into());
        self
    }
}

/// The answer of a coil scan.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Answer {
    /// Axial field per coil current, nT/mA.
    pub coil_constant: Stated,
    /// Axial field at zero current, nT; its qualifier says when a light shift is contained in it.
    pub residual_field: Stated,
    /// Coil current at which the axial field vanishes, mA.
    pub null_current: Stated,
    /// Field across the beam, nT: a value, an upper limit, or a reason.
    pub transverse_field: Stated,
    /// Full width at half maximum of the transparency peak, kHz; the qualifier names the current.
    pub linewidth: Stated,
    /// (peak - floor) / (peak + floor) of the transmission, %; the qualifier names the current.
    pub contrast: Stated,
    /// Chi-square of the field law over the points; `None` without a fit.
    pub chi2: Option<f64>,
    /// Degrees of freedom of the field law; `None` without a fit.
    pub dof: Option<u64>,
    /// Points that entered the field law.
    pub used: u64,
    /// Mean ratio of a fit's own sigma to the scatter of separate acquisitions; 1 for white noise.
    #[serde(skip_serializing_if = "Option::is_none", default)]
    pub sigma_over_scatter: Option<f64>,
}

impl Answer {
    /// The named statements in the order in which they are read, with the names used in `--json`.
    pub fn statements(&self) -> [(&'static str, &Stated); 6] {
        [
            ("coil_constant", &self.coil_constant),
            ("residual_field", &self.residual_field),
            ("null_current", &self.null_current),
            ("transverse_field", &self.transverse_field),
            ("linewidth", &self.linewidth),
            ("contrast", &self.contrast),
        ]
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_missing_number_keeps_its_keys_and_says_why() {
        let json = serde_json::to_value(Stated::missing("cannot tell", "nT")).unwrap();
        assert!(json["value"].is_null());
        assert_eq!(json["reason"], "cannot tell");
    }
}
