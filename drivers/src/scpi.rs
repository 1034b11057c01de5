//! The generic SCPI driver: what all roles share, behind a command map. It alone is current supply,
//! temperature controller and monitor; generator and digitizer add sweeps and records to it.
//!
//! It remembers every number it set, so that after a doubt (a late reply, a link made anew) it can tell
//! whether the instrument still stands where it was put.

use std::collections::BTreeMap;
use std::sync::Arc;

use darkline_core::quantity::Setting;

use crate::error::DriverError;
use crate::exchange::Exchange;
use crate::link::Dial;
use crate::map::{CommandMap, Entry};
use crate::role::{
    CurrentSupply, Granted, Identity, Monitor, Outcome, Role, TemperatureController,
};

/// Makes a driver that holds a [`Scpi`] play what every role can do through it.
macro_rules! delegate_role {
    ($driver:ty) => {
        impl Role for $driver {
            fn identity(&self) -> &Identity {
                self.scpi.identity()
            }
            async fn set(
                &mut self,
                property: &str,
                to: darkline_core::quantity::Setting,
            ) -> Outcome<Granted<darkline_core::quantity::Setting>> {
                self.scpi.set(property, to).await
            }
            async fn readback(
                &mut self,
                property: &str,
            ) -> Outcome<darkline_core::quantity::Setting> {
                self.scpi.readback(property).await
            }
            async fn measure(&mut self, property: &str) -> Outcome<f64> {
                self.scpi.measure(property).await
            }
            fn measures(&self, property: &str) -> bool {
                self.scpi.measures(property)
            }
            fn resolution(&self, property: &str) -> f64 {
                self.scpi.resolution(property)
            }
            async fn check(&mut self) -> Outcome<()> {
                self.scpi.check().await
            }
            async fn reconnect(&mut self) -> Outcome<()> {
                self.scpi.reconnect().await
            }
            async fn leave(&mut self) -> Outcome<()> {
                self.scpi.leave().await
            }
        }
    };
}
use delegate_role;

mod converse;
mod digitizer;
mod generator;

use converse::POWER_ON;
pub use digitizer::ScpiDigitizer;
pub use generator::ScpiGenerator;

/// One SCPI instrument behind a command map.
pub struct Scpi {
    exchange: Exchange,
    map: Arc<CommandMap>,
    identity: Identity,
    /// What was set last, by property; `None` where the outcome is not known.
    known: BTreeMap<String, Option<Setting>>,
    written: BTreeMap<String, u64>,
    /// The link's doubts that have been followed by a verification.
    doubts: u64,
    /// Power cycles seen.
    cycles: u64,
}

impl Scpi {
    /// Opens the link, checks who answers, reads away old errors. Changes no setting.
    ///
    /// # Errors
    /// [`DriverError::Unreachable`], [`DriverError::WrongIdentity`], or any of the first exchanges.
    /// `pattern` is checked beside the map's own; `None` leaves it to the map.
    pub async fn open(
        name: &str,
        map: Arc<CommandMap>,
        dialler: Box<dyn Dial>,
        pattern: Option<&str>,
    ) -> Outcome<Self> {
        let mut exchange = Exchange::new(name, dialler, map.talk.manners.clone());
        exchange.connect().await?;
        let mut scpi = Self {
            exchange,
            map,
            identity: Identity {
                maker: String::new(),
                model: String::new(),
                serial: String::new(),
                firmware: String::new(),
            },
            known: BTreeMap::new(),
            written: BTreeMap::new(),
            doubts: 0,
            cycles: 0,
        };
        // A serial line may hold the end of an old conversation.
        scpi.exchange.distrust();
        scpi.exchange.resync().await.or_else(|error| match error {
            // Without a sentinel there is nothing to match; the identity is the check.
            DriverError::OutOfStep { attempts: 0, .. } => Ok(()),
            other => Err(other),
        })?;
        scpi.identity = scpi.ask_identity().await?;
        scpi.verify_pattern(pattern)?;
        scpi.enter().await?;
        scpi.read_errors().await?;
        scpi.power_on_bit().await?;
        scpi.doubts = scpi.exchange.doubts();
        Ok(scpi)
    }

    /// The map it was opened with.
    pub fn map(&self) -> &CommandMap {
        &self.map
    }

    /// The exchange, for what no role covers.
    pub fn exchange(&mut self) -> &mut Exchange {
        &mut self.exchange
    }

    /// Changes whenever settings made before may be gone.
    pub(crate) fn standing(&self) -> u64 {
        self.exchange.doubts() + self.cycles
    }

    /// Makes the link open, in step and verified, before anything is asked or said.
    pub(crate) async fn steady(&mut self) -> Outcome<()> {
        if !self.exchange.is_open() {
            return self.reconnect().await;
        }
        if self.exchange.is_dirty() {
            match self.exchange.resync().await {
                Ok(()) => {}
                Err(error) if error.link_lost() => return self.reconnect().await,
                Err(error) => return Err(error),
            }
        }
        if self.doubts != self.exchange.doubts() {
            self.verify().await?;
        }
        Ok(())
    }

    async fn ask_identity(&mut self) -> Outcome<Identity> {
        let reply = self.exchange.ask(&["*IDN?"]).await?;
        let text = String::from_utf8_lossy(reply.bytes()).into_owned();
        let mut fields = text.splitn(4, ',').map(|field| field.trim().to_owned());
        let mut next = || fields.next().unwrap_or_default();
        Ok(Identity {
            maker: next(),
            model: next(),
            serial: next(),
            firmware: next(),
        })
    }

    fn verify_pattern(&self, pattern: Option<&str>) -> Outcome<()> {
        let found = self.identity.to_string();
        let wrong = |expected: &str| DriverError::WrongIdentity {
            instrument: self.exchange.instrument().to_owned(),
            expected: expected.to_owned(),
            found: found.clone(),
        };
        if !matches(&self.map.identity, &found) {
            return Err(wrong(&self.map.identity));
        }
        match pattern {
            Some(part) if !matches(&format!("*{part}*"), &found) => Err(wrong(part)),
            _ => Ok(()),
        }
    }

    async fn enter(&mut self) -> Outcome<()> {
        let map = Arc::clone(&self.map);
        let enter: Vec<&str> = map.talk.enter.iter().map(String::as_str).collect();
        match enter.is_empty() {
            true => Ok(()),
            false => self.exchange.say(&enter).await,
        }
    }

    /// After a doubt: errors of the confusion read away, power-on bit, and every number set before.
    async fn verify(&mut self) -> Outcome<()> {
        for error in self.read_errors().await? {
            tracing::warn!(instrument = self.exchange.instrument(), %error, "left over after a doubt");
        }
        let status = self.power_on_bit().await?;
        let doubts = self.exchange.doubts();
        if status & POWER_ON != 0 {
            self.doubts = doubts;
            return self.judge_power(status);
        }
        let known: Vec<(String, Option<Setting>)> = self
            .known
            .iter()
            .map(|(property, setting)| (property.clone(), *setting))
            .collect();
        for (property, setting) in known {
            let entry = self.entry(&property)?;
            let found = self.ask_readback(&property, &entry).await?;
            self.known.insert(property.clone(), Some(found));
            match setting {
                Some(setting) if !agree(setting, found, entry.resolution) => {
                    return Err(self.differs(&property, setting, found));
                }
                _ => {}
            }
        }
        self.doubts = doubts;
        Ok(())
    }

    fn differs(&self, property: &str, asked: Setting, readback: Setting) -> DriverError {
        let text = |setting: Setting| match setting {
            Setting::Number(value) => format!("{value}"),
            Setting::Switch(true) => "on".to_owned(),
            Setting::Switch(false) => "off".to_owned(),
        };
        DriverError::Readback {
            instrument: self.exchange.instrument().to_owned(),
            property: property.to_owned(),
            asked: text(asked),
            readback: text(readback),
        }
    }

    pub(crate) fn entry(&self, property: &str) -> Outcome<Entry> {
        self.map
            .quantities
            .get(property)
            .cloned()
            .ok_or_else(|| self.not_in_map(format!("`{property}`")))
    }

    pub(crate) fn not_in_map(&self, what: impl Into<String>) -> DriverError {
        DriverError::NotInMap {
            instrument: self.exchange.instrument().to_owned(),
            what: what.into(),
        }
    }

    /// One answer, read by its entry.
    pub(crate) fn heard(
        &mut self,
        entry: &Entry,
        question: &str,
        answer: &[u8],
    ) -> Outcome<Setting> {
        match entry.read(answer) {
            Some(setting) => Ok(setting),
            None => Err(self.out_of_place(question, answer, "what `hear` of its map says")),
        }
    }

    async fn ask_readback(&mut self, property: &str, entry: &Entry) -> Outcome<Setting> {
        let question = entry
            .readback
            .as_deref()
            .ok_or_else(|| self.not_in_map(format!("readback of `{property}`")))?;
        let answers = self.converse(&[], &[question]).await?;
        self.heard(entry, question, answers.first().map_or(&[], Vec::as_slice))
    }

    fn spend(&mut self, property: &str, budget: Option<u64>) -> Outcome<()> {
        let written = self.written.entry(property.to_owned()).or_default();
        match budget {
            Some(budget) if *written >= budget => Err(DriverError::BudgetSpent {
                instrument: self.exchange.instrument().to_owned(),
                property: property.to_owned(),
                written: *written,
            }),
            _ => {
                *written += 1;
                Ok(())
            }
        }
    }
}

impl Role for Scpi {
    fn identity(&self) -> &Identity {
        &self.identity
    }

    async fn set(&mut self, property: &str, to: Setting) -> Outcome<Granted<Setting>> {
        let entry = self.entry(property)?;
        let message = entry
            .write(to)
            .ok_or_else(|| self.not_in_map(format!("`say` for {to:?} of `{property}`")))?;
        let question = entry
            .readback
            .clone()
            .ok_or_else(|| self.not_in_map(format!("readback of `{property}`")))?;
        self.steady().await?;
        // Memory that wears out is spared where nothing changes.
        let stands = entry.budget.is_some() && self.known.get(property) == Some(&Some(to));
        let says = match stands {
            true => Vec::new(),
            false => {
                self.spend(property, entry.budget)?;
                vec![message]
            }
        };
        self.known.insert(property.to_owned(), None);
        let answers = self.converse_checked(&says, &[&question]).await?;
        let found = self.heard(
            &entry,
            &question,
            answers.first().map_or(&[], Vec::as_slice),
        )?;
        self.known.insert(property.to_owned(), Some(found));
        let judged = matches!(to, Setting::Switch(_)) || entry.resolution > 0.0;
        if judged && !agree(to, found, entry.resolution) {
            return Err(self.differs(property, to, found));
        }
        Ok(Granted {
            asked: to,
            granted: found,
        })
    }

    async fn readback(&mut self, property: &str) -> Outcome<Setting> {
        let entry = self.entry(property)?;
        self.steady().await?;
        self.ask_readback(property, &entry).await
    }

    async fn measure(&mut self, property: &str) -> Outcome<f64> {
        let entry = self.entry(property)?;
        let question = entry
            .measure
            .as_deref()
            .ok_or_else(|| self.not_in_map(format!("measurement of `{property}`")))?;
        self.steady().await?;
        let answers = self.converse(&[], &[question]).await?;
        let answer = answers.first().map_or(&[][..], Vec::as_slice);
        match self.heard(&entry, question, answer)? {
            Setting::Number(value) => Ok(value),
            Setting::Switch(_) => Err(self.out_of_place(question, answer, "a number")),
        }
    }

    fn measures(&self, property: &str) -> bool {
        let entry = self.map.quantities.get(property);
        entry.is_some_and(|entry| entry.measure.is_some())
    }

    fn resolution(&self, property: &str) -> f64 {
        let entry = self.map.quantities.get(property);
        entry.map_or(0.0, |entry| entry.resolution)
    }

    async fn check(&mut self) -> Outcome<()> {
        self.steady().await?;
        self.converse_checked(&[], &[]).await.map(drop)
    }

    async fn reconnect(&mut self) -> Outcome<()> {
        self.exchange.connect().await?;
        // Bytes of before may still stand on a serial line.
        self.exchange.distrust();
        match self.exchange.resync().await {
            Err(DriverError::OutOfStep { attempts: 0, .. }) => self.exchange.connect().await?,
            other => other?,
        }
        let found = self.ask_identity().await?;
        if (&found.maker, &found.model, &found.serial)
            != (
                &self.identity.maker,
                &self.identity.model,
                &self.identity.serial,
            )
        {
            let expected = self.identity.to_string();
            self.exchange.close();
            return Err(DriverError::WrongIdentity {
                instrument: self.exchange.instrument().to_owned(),
                expected,
                found: found.to_string(),
            });
        }
        self.enter().await?;
        self.verify().await
    }

    async fn leave(&mut self) -> Outcome<()> {
        let map = Arc::clone(&self.map);
        let leave: Vec<&str> = map.talk.leave.iter().map(String::as_str).collect();
        if self.exchange.is_open() && !leave.is_empty() {
            self.exchange.say(&leave).await?;
        }
        self.exchange.close();
        Ok(())
    }
}

impl CurrentSupply for Scpi {}
impl TemperatureController for Scpi {}
impl Monitor for Scpi {}

impl std::fmt::Display for Identity {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(
            f,
            "{},{},{},{}",
            self.maker, self.model, self.serial, self.firmware
        )
    }
}

/// Whether a readback agrees with a setting: within the resolution, and in any case to 1e-9 of the value.
pub(crate) fn agree(setting: Setting, found: Setting, resolution: f64) -> bool {
    match (setting, found) {
        (Setting::Switch(set), Setting::Switch(found)) => set == found,
        (Setting::Number(set), Setting::Number(found)) => {
            (set - found).abs() <= resolution * (1.0 + 1e-9) + 1e-9 * set.abs()
        }
        _ => false,
    }
}

/// Whether a text matches a pattern in which `*` stands for any text. Case does not matter.
fn matches(pattern: &str, text: &str) -> bool {
    let (pattern, text) = (pattern.to_lowercase(), text.to_lowercase());
    let Some((first, rest)) = pattern.split_once('*') else {
        return pattern == text;
    };
    let Some(mut text) = text.strip_prefix(first) else {
        return false;
    };
    let (middle, last) = rest.rsplit_once('*').unwrap_or(("", rest));
    for part in middle.split('*').filter(|part| !part.is_empty()) {
        match text.find(part) {
            Some(at) => text = &text[at + part.len()..],
            None => return false,
        }
    }
    text.ends_with(last)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn patterns() {
        for (pattern, text, expected) in [
            ("*", "", true),
            ("Umbra,BCS-1,*", "Umbra,BCS-1,2001,2.0", true),
            ("umbra,*,2001,*", "Umbra,BCS-1,2001,2.0", true),
            ("Umbra,RFG*", "Umbra,BCS-1,2001,2.0", false),
            ("*,2.0", "Umbra,BCS-1,2001,2.0", true),
            ("*20*20*", "2020", true),
            ("*20*20*20*", "2020", false),
            ("ab*b", "ab", false),
        ] {
            assert_eq!(matches(pattern, text), expected, "{pattern} on {text}");
        }
    }

    #[test]
    fn agreement_is_a_whole_resolution() {
        let number = Setting::Number;
        assert!(agree(number(0.0203), number(0.02031), 1e-5));
        assert!(!agree(number(0.0203), number(0.020311), 1e-5));
        assert!(agree(number(8e7), number(8e7 + 0.01), 0.0));
        assert!(!agree(Setting::Switch(true), Setting::Switch(false), 1.0));
        assert!(!agree(number(f64::NAN), number(0.0), 1.0));
    }
}
