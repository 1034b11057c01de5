//! Any instrument, by its role: what a map, a link and a name are opened to.

use std::sync::Arc;

use darkline_core::channel;
use darkline_core::quantity::Setting;

use crate::error::DriverError;
use crate::link::Dial;
use crate::map::CommandMap;
use crate::role::{Granted, Identity, Outcome, Role};
use crate::scpi::{Scpi, ScpiDigitizer, ScpiGenerator};

/// An opened instrument. What every role can do it does itself; the rest is in its variants.
pub enum Instrument {
    /// `rf-generator`
    RfGenerator(ScpiGenerator),
    /// `current-supply`
    CurrentSupply(Scpi),
    /// `digitizer`
    Digitizer(ScpiDigitizer),
    /// `temperature-controller`
    TemperatureController(Scpi),
    /// `monitor`
    Monitor(Scpi),
}

/// Opens an instrument: dials, checks who answers, changes no setting. `identity` is text that its `*IDN?`
/// reply must contain besides what the map says.
///
/// # Errors
/// Those of the link and of the first exchanges; [`DriverError::NotInMap`] for a map of another role.
pub async fn open(
    name: &str,
    role: channel::Role,
    map: CommandMap,
    dialler: Box<dyn Dial>,
    identity: Option<&str>,
) -> Outcome<Instrument> {
    if map.role != role {
        return Err(DriverError::NotInMap {
            instrument: name.to_owned(),
            what: format!("role `{}`: it is for `{}`", role.name(), map.role.name()),
        });
    }
    let scpi = Scpi::open(name, Arc::new(map), dialler, identity).await?;
    Ok(match role {
        channel::Role::RfGenerator => Instrument::RfGenerator(ScpiGenerator::new(scpi)),
        channel::Role::CurrentSupply => Instrument::CurrentSupply(scpi),
        channel::Role::Digitizer => Instrument::Digitizer(ScpiDigitizer::new(scpi)),
        channel::Role::TemperatureController => Instrument::TemperatureController(scpi),
        channel::Role::Monitor => Instrument::Monitor(scpi),
    })
}

impl Instrument {
    /// Its role.
    pub fn role(&self) -> channel::Role {
        match self {
            Self::RfGenerator(_) => channel::Role::RfGenerator,
            Self::CurrentSupply(_) => channel::Role::CurrentSupply,
            Self::Digitizer(_) => channel::Role::Digitizer,
            Self::TemperatureController(_) => channel::Role::TemperatureController,
            Self::Monitor(_) => channel::Role::Monitor,
        }
    }

    fn scpi(&self) -> &Scpi {
        match self {
            Self::RfGenerator(driver) => &driver.scpi,
            Self::Digitizer(driver) => &driver.scpi,
            Self::CurrentSupply(scpi) | Self::TemperatureController(scpi) | Self::Monitor(scpi) => {
                scpi
            }
        }
    }

    fn scpi_mut(&mut self) -> &mut Scpi {
        match self {
            Self::RfGenerator(driver) => &mut driver.scpi,
            Self::Digitizer(driver) => &mut driver.scpi,
            Self::CurrentSupply(scpi) | Self::TemperatureController(scpi) | Self::Monitor(scpi) => {
                scpi
            }
        }
    }
}

impl Role for Instrument {
    fn identity(&self) -> &Identity {
        self.scpi().identity()
    }

    async fn set(&mut self, property: &str, to: Setting) -> Outcome<Granted<Setting>> {
        self.scpi_mut().set(property, to).await
    }

    async fn readback(&mut self, property: &str) -> Outcome<Setting> {
        self.scpi_mut().readback(property).await
    }

    async fn measure(&mut self, property: &str) -> Outcome<f64> {
        self.scpi_mut().measure(property).await
    }

    fn measures(&self, property: &str) -> bool {
        self.scpi().measures(property)
    }

    fn resolution(&self, property: &str) -> f64 {
        self.scpi().resolution(property)
    }

    async fn check(&mut self) -> Outcome<()> {
        self.scpi_mut().check().await
    }

    async fn reconnect(&mut self) -> Outcome<()> {
        self.scpi_mut().reconnect().await
    }

    async fn leave(&mut self) -> Outcome<()> {
        self.scpi_mut().leave().await
    }
}
