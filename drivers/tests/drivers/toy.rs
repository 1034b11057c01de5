//! A toy instrument in memory: a few registers, an error queue, an event status register, records. Its
//! reader of messages is its own: it shares nothing with the drivers' framing.

use std::collections::BTreeMap;
use std::io;
use std::sync::{Arc, Mutex, MutexGuard};
use std::time::Duration;

use darkline_drivers::link::{Dial, dial_with};
use tokio::io::{AsyncReadExt, AsyncWriteExt, DuplexStream};

/// What the toy is and does; tests look at it and change it as they go.
#[derive(Default)]
pub struct Insides {
    pub identity: String,
    pub registers: BTreeMap<String, String>,
    pub errors: Vec<(i32, &'static str)>,
    pub esr: u32,
    pub ese: u32,
    /// Every message heard, in order.
    pub heard: Vec<String>,
    /// When it was heard.
    pub times: Vec<tokio::time::Instant>,
    /// Answers nothing.
    pub silent: bool,
    /// Refuses connections.
    pub unplugged: bool,
    pub armed: bool,
    pub count: u64,
    /// Triggers to miss.
    pub miss: u32,
    /// Length of a record.
    pub record_time: Duration,
    /// Cuts the link after this many bytes of the next block.
    pub cut_block: Option<usize>,
    /// Sends no more than this many bytes of the next block, and goes on as if it had.
    pub short_block: Option<usize>,
    /// Lets a block be indefinite.
    pub indefinite: bool,
    /// Rounds currents to 1 mA.
    pub coarse: bool,
    /// Highest current it takes.
    pub most: f64,
}

#[derive(Clone)]
pub struct Toy {
    insides: Arc<Mutex<Insides>>,
}

impl Toy {
    pub fn new() -> Self {
        let registers = [
            ("SOUR:CURR", "0"),
            ("SOUR:TEMP", "25"),
            ("OUTP", "0"),
            ("FORM", "ASC"),
            ("FORM:BORD", "NORM"),
            ("TRIG:SOUR", "IMM"),
            ("TRIG:DEL", "0"),
            ("SENS:SWE:POIN", "8"),
            ("SENS:SWE:TINT", "1E-5"),
            ("SENS1:VOLT:RANG:PTP", "2"),
            ("SENS1:VOLT:RANG:OFFS", "0"),
            ("INP1:COUP", "DC"),
            ("INP1:FILT", "0"),
            ("INP1:FILT:FREQ", "1E6"),
            ("SOUR:FREQ", "8E7"),
            ("SOUR:POW", "-60"),
            ("SOUR:FREQ:MODE", "CW"),
            ("SOUR:FREQ:STAR", "0"),
            ("SOUR:FREQ:STOP", "0"),
            ("SOUR:SWE:TIME", "0.04"),
            ("SOUR:SWE:POIN", "401"),
            ("SOUR:SWE:DIR", "UP"),
            ("SOUR:SWE:GEN", "STEP"),
            ("TAG", "0"),
        ];
        let insides = Insides {
            identity: "Toy,Works,7,1.0".to_owned(),
            registers: registers.map(|(k, v)| (k.to_owned(), v.to_owned())).into(),
            esr: 128,
            record_time: Duration::from_millis(40),
            most: 0.1,
            ..Insides::default()
        };
        Self {
            insides: Arc::new(Mutex::new(insides)),
        }
    }

    pub fn look(&self) -> MutexGuard<'_, Insides> {
        self.insides.lock().unwrap()
    }

    pub fn register(&self, name: &str) -> String {
        self.look().registers[name].clone()
    }

    pub fn dialler(&self) -> Box<dyn Dial> {
        let toy = self.clone();
        Box::new(dial_with("toy", move || {
            if toy.look().unplugged {
                return Err(io::Error::new(
                    io::ErrorKind::ConnectionRefused,
                    "unplugged",
                ));
            }
            let (ours, theirs) = tokio::io::duplex(1 << 16);
            tokio::spawn(toy.clone().live(theirs));
            Ok(ours)
        }))
    }

    async fn live(self, mut link: DuplexStream) {
        let mut line = Vec::new();
        loop {
            match link.read_u8().await {
                Ok(b'\n') => {}
                Ok(b'\r') => continue,
                Ok(byte) => {
                    line.push(byte);
                    continue;
                }
                Err(_) => return,
            }
            let message = String::from_utf8(std::mem::take(&mut line)).unwrap();
            if self.message(&message, &mut link).await.is_err() {
                return;
            }
        }
    }

    async fn message(&self, message: &str, link: &mut DuplexStream) -> Result<(), ()> {
        {
            let mut look = self.look();
            look.heard.push(message.to_owned());
            look.times.push(tokio::time::Instant::now());
        }
        let mut answers: Vec<Vec<u8>> = Vec::new();
        for unit in message.split(';') {
            let unit = unit.trim().trim_start_matches(':');
            if unit == "*OPC?" {
                let (armed, missed, time) = {
                    let mut look = self.look();
                    let missed = look.armed && look.miss > 0;
                    look.miss -= u32::from(missed);
                    (look.armed, missed, look.record_time)
                };
                if missed {
                    // No trigger: the answer waits for what never comes; the next message interrupts it.
                    return Ok(());
                }
                if armed {
                    tokio::time::sleep(time).await;
                    let mut look = self.look();
                    look.armed = false;
                    look.count += 1;
                }
            }
            match self.unit(unit) {
                Ok(Some(answer)) => answers.push(answer),
                Ok(None) => {}
                Err(error) => {
                    self.look().errors.push(error);
                    if error.0 > -200 {
                        break;
                    }
                }
            }
        }
        if answers.is_empty() || self.look().silent {
            return Ok(());
        }
        let mut reply = answers.join(&b';');
        reply.push(b'\n');
        let (cut, short) = {
            let mut look = self.look();
            match reply.contains(&b'#') {
                true => (look.cut_block.take(), look.short_block.take()),
                false => (None, None),
            }
        };
        let length = cut.or(short).unwrap_or(reply.len());
        link.write_all(&reply[..length]).await.map_err(drop)?;
        if cut.is_some() { Err(()) } else { Ok(()) }
    }

    fn unit(&self, unit: &str) -> Result<Option<Vec<u8>>, (i32, &'static str)> {
        let mut look = self.look();
        let text = |text: String| Ok(Some(text.into_bytes()));
        match unit {
            "*IDN?" => return text(look.identity.clone()),
            "*ESR?" => return text(std::mem::take(&mut look.esr).to_string()),
            "*ESE?" => return text(look.ese.to_string()),
            "*OPC?" => return text("1".to_owned()),
            "SYST:ERR?" => {
                return match look.errors.is_empty() {
                    true => text("0,\"No error\"".to_owned()),
                    false => {
                        let (number, words) = look.errors.remove(0);
                        text(format!("{number},\"{words}\""))
                    }
                };
            }
            "INIT" => {
                look.armed = true;
                return Ok(None);
            }
            "ABOR" | "*TRG" => {
                look.armed = unit == "*TRG";
                return Ok(None);
            }
            "STAT:OPER:COND?" => return text(if look.armed { "32" } else { "0" }.to_owned()),
            "TRAC:COUN?" => return text(look.count.to_string()),
            "TRAC:PRE? CH1" => {
                return text(format!("4,1E-5,0.5,1.5,0,{},-3,300", look.count));
            }
            "TRAC? CH1" => {
                // -2, 256, -3 (clipped below), 300 (clipped above), most significant byte first.
                let head: &[u8] = if look.indefinite { b"#0" } else { b"#18" };
                return Ok(Some([head, b"\xff\xfe\x01\x00\xff\xfd\x01\x2c"].concat()));
            }
            "MEAS:CURR?" => return text(look.registers["SOUR:CURR"].clone()),
            "MEAS:VOLT? (@1)" => return text("0.6".to_owned()),
            "MEAS:TEMP?" => return text("9.91E37".to_owned()),
            _ => {}
        }
        if let Some(number) = unit.strip_prefix("*ESE ") {
            look.ese = number.parse().unwrap();
            return Ok(None);
        }
        if let Some(name) = unit.strip_suffix('?') {
            return match look.registers.get(name) {
                Some(value) => text(value.clone()),
                None => Err((-113, "Undefined header")),
            };
        }
        let (name, value) = unit.split_once(' ').ok_or((-113, "Undefined header"))?;
        if name == "SOUR:CURR" && value.parse::<f64>().is_ok_and(|v| v.abs() > look.most) {
            return Err((-222, "Data out of range"));
        }
        let rounded = (value.parse::<f64>().unwrap_or(0.0) * 1e3).round() / 1e3;
        let value = match look.coarse && name == "SOUR:CURR" {
            true => rounded.to_string(),
            false => value.to_owned(),
        };
        match look.registers.get_mut(name) {
            Some(place) => {
                *place = value;
                Ok(None)
            }
            None => Err((-113, "Undefined header")),
        }
    }
}
