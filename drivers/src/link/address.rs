//! Addresses of instruments: `tcp://host:port`, `serial:///dev/…?baud=…`, and the VISA resource names of
//! VPP-4.3 (section 4.3.1, table 4.3.1) that mean one of the two. Text only; nothing is opened.

use std::fmt;
use std::path::PathBuf;
use std::str::FromStr;

use thiserror::Error;

/// Where an instrument is reached.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Address {
    /// A raw TCP socket.
    Tcp {
        /// Name or number of the host, an IPv6 number without its brackets.
        host: String,
        /// Port.
        port: u16,
    },
    /// A serial line.
    Serial {
        /// Path of the device, best one under `/dev/serial/by-id`.
        device: PathBuf,
        /// How it is driven.
        line: Line,
    },
}

/// How a serial line is driven.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Line {
    /// Bits per second.
    pub baud: u32,
    /// Parity bit.
    pub parity: Parity,
    /// Data bits, 7 or 8.
    pub data_bits: u8,
    /// Stop bits, 1 or 2.
    pub stop_bits: u8,
    /// Flow control.
    pub flow: Flow,
}

/// Parity bit of a serial line.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Parity {
    /// None.
    None,
    /// Even.
    Even,
    /// Odd.
    Odd,
}

/// Flow control of a serial line.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Flow {
    /// None.
    None,
    /// XON and XOFF. Spoils binary blocks.
    Software,
    /// RTS and CTS.
    Hardware,
}

impl Default for Line {
    /// 9600 baud, 8 data bits, no parity, 1 stop bit, no flow control.
    fn default() -> Self {
        Self {
            baud: 9600,
            parity: Parity::None,
            data_bits: 8,
            stop_bits: 1,
            flow: Flow::None,
        }
    }
}

/// Text that is no address.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
#[error(
    "`{address}` is no address: {why}; write `tcp://host:port`, `serial:///dev/ttyUSB0?baud=115200`, `TCPIP0::host::port::SOCKET` or `ASRL/dev/ttyUSB0::INSTR`"
)]
pub struct AddressError {
    /// As written.
    pub address: String,
    /// What is wrong with it.
    pub why: String,
}

impl FromStr for Address {
    type Err = AddressError;

    fn from_str(text: &str) -> Result<Self, AddressError> {
        let text = text.trim();
        parse(text).map_err(|why| AddressError {
            address: text.to_owned(),
            why,
        })
    }
}

impl fmt::Display for Address {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Tcp { host, port } if host.contains(':') => write!(f, "tcp://[{host}]:{port}"),
            Self::Tcp { host, port } => write!(f, "tcp://{host}:{port}"),
            Self::Serial { device, line } => {
                write!(f, "serial://{}?baud={}", device.display(), line.baud)?;
                match line.parity {
                    Parity::None => {}
                    Parity::Even => write!(f, "&parity=even")?,
                    Parity::Odd => write!(f, "&parity=odd")?,
                }
                if line.data_bits != 8 {
                    write!(f, "&data={}", line.data_bits)?;
                }
                if line.stop_bits != 1 {
                    write!(f, "&stop={}", line.stop_bits)?;
                }
                match line.flow {
                    Flow::None => Ok(()),
                    Flow::Software => write!(f, "&flow=software"),
                    Flow::Hardware => write!(f, "&flow=hardware"),
                }
            }
        }
    }
}

fn parse(text: &str) -> Result<Address, String> {
    if let Some(rest) = text.strip_prefix("tcp://") {
        let (host, port) = rest
            .trim_end_matches('/')
            .rsplit_once(':')
            .ok_or("the port is missing")?;
        return tcp(host, port);
    }
    if let Some(rest) = text.strip_prefix("serial://") {
        return serial(rest);
    }
    let upper = text.to_ascii_uppercase();
    if upper.starts_with("TCPIP") {
        return visa_tcp(&text["TCPIP".len()..]);
    }
    if upper.starts_with("ASRL") {
        return visa_serial(&text["ASRL".len()..]);
    }
    for kind in ["GPIB", "USB", "PXI", "VXI"] {
        if upper.starts_with(kind) {
            return Err(format!(
                "{kind} is not reached from here, only TCP sockets and serial lines"
            ));
        }
    }
    Err("it begins with no known kind of link".to_owned())
}

fn tcp(host: &str, port: &str) -> Result<Address, String> {
    let host = host
        .strip_prefix('[')
        .and_then(|inner| inner.strip_suffix(']'))
        .unwrap_or(host);
    if host.is_empty() || host.contains(|c: char| c.is_whitespace() || c == '/') {
        return Err(format!("`{host}` is no name of a host"));
    }
    match port.parse::<u16>() {
        Ok(port) if port > 0 => Ok(Address::Tcp {
            host: host.to_owned(),
            port,
        }),
        _ => Err(format!("`{port}` is no port from 1 to 65535")),
    }
}

fn serial(rest: &str) -> Result<Address, String> {
    let (device, options) = rest.split_once('?').unwrap_or((rest, ""));
    if !device.starts_with('/') || device.len() < 2 {
        return Err(format!(
            "`{device}` is no absolute path of a device (three slashes: `serial:///dev/…`)"
        ));
    }
    let mut line = Line::default();
    for option in options.split('&').filter(|option| !option.is_empty()) {
        let (key, value) = option
            .split_once('=')
            .ok_or_else(|| format!("option `{option}` has no value"))?;
        set(&mut line, key, value)?;
    }
    Ok(Address::Serial {
        device: PathBuf::from(device),
        line,
    })
}

fn set(line: &mut Line, key: &str, value: &str) -> Result<(), String> {
    let refuse = |wanted: &str| Err(format!("`{key}` is {wanted}, not `{value}`"));
    match (key, value) {
        ("baud", _) => match value.parse() {
            Ok(baud) if (50..=4_000_000).contains(&baud) => line.baud = baud,
            _ => return refuse("50 to 4000000"),
        },
        ("parity", "none") => line.parity = Parity::None,
        ("parity", "even") => line.parity = Parity::Even,
        ("parity", "odd") => line.parity = Parity::Odd,
        ("parity", _) => return refuse("none, even or odd"),
        ("data", "7") => line.data_bits = 7,
        ("data", "8") => line.data_bits = 8,
        ("data", _) => return refuse("7 or 8"),
        ("stop", "1") => line.stop_bits = 1,
        ("stop", "2") => line.stop_bits = 2,
        ("stop", _) => return refuse("1 or 2"),
        ("flow", "none") => line.flow = Flow::None,
        ("flow", "software") => line.flow = Flow::Software,
        ("flow", "hardware") => line.flow = Flow::Hardware,
        ("flow", _) => return refuse("none, software or hardware"),
        _ => {
            return Err(format!(
                "unknown option `{key}` (there are baud, parity, data, stop, flow)"
            ));
        }
    }
    Ok(())
}

/// What follows `TCPIP`: `[board]::host::port::SOCKET`. The `INSTR` forms mean VXI-11 or HiSLIP.
fn visa_tcp(rest: &str) -> Result<Address, String> {
    let (board, rest) = rest.split_once("::").ok_or("`::` is missing")?;
    if !board.chars().all(|c| c.is_ascii_digit()) {
        return Err(format!("`{board}` is no number of a board"));
    }
    let rest = match rest.len().checked_sub("::SOCKET".len()) {
        Some(at) if rest.is_char_boundary(at) && rest[at..].eq_ignore_ascii_case("::SOCKET") => {
            &rest[..at]
        }
        _ => return Err("of the TCPIP resources only `::SOCKET` is reached from here".to_owned()),
    };
    let (host, port) = rest.rsplit_once("::").ok_or("the port is missing")?;
    tcp(host, port)
}

/// What follows `ASRL`: `<path or number>[::INSTR][?options]`. Number n is `/dev/ttyS<n-1>` (common
/// practice, no source); the options are our own, since VISA sets them as attributes.
fn visa_serial(rest: &str) -> Result<Address, String> {
    let (name, options) = rest.split_once('?').unwrap_or((rest, ""));
    let name = match name.len().checked_sub("::INSTR".len()) {
        Some(at) if name.is_char_boundary(at) && name[at..].eq_ignore_ascii_case("::INSTR") => {
            &name[..at]
        }
        _ => name,
    };
    let device = match name.parse::<u16>() {
        Ok(0) => return Err("serial lines are counted from 1".to_owned()),
        Ok(number) => format!("/dev/ttyS{}", number - 1),
        Err(_) => name.to_owned(),
    };
    serial(&format!("{device}?{options}"))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn addresses_are_read_and_written() {
        for (text, written) in [
            ("tcp://scope.local:5025", "tcp://scope.local:5025"),
            ("tcp://[::1]:5025/", "tcp://[::1]:5025"),
            ("TCPIP0::10.0.0.4::5025::SOCKET", "tcp://10.0.0.4:5025"),
            ("tcpip::scope::5025::socket", "tcp://scope:5025"),
            ("TCPIP::[fe80::1]::5025::SOCKET", "tcp://[fe80::1]:5025"),
            ("serial:///dev/ttyUSB0", "serial:///dev/ttyUSB0?baud=9600"),
            (
                "serial:///dev/ttyUSB0?baud=115200&parity=even&stop=2&data=7&flow=hardware",
                "serial:///dev/ttyUSB0?baud=115200&parity=even&data=7&stop=2&flow=hardware",
            ),
            ("ASRL/dev/ttyUSB0::INSTR", "serial:///dev/ttyUSB0?baud=9600"),
            (
                "ASRL/dev/ttyUSB0::INSTR?baud=19200",
                "serial:///dev/ttyUSB0?baud=19200",
            ),
            ("ASRL1::INSTR", "serial:///dev/ttyS0?baud=9600"),
        ] {
            let address: Address = text.parse().unwrap();
            assert_eq!(address.to_string(), written, "{text}");
            assert_eq!(written.parse::<Address>().unwrap(), address);
        }
    }

    #[test]
    fn wrong_addresses_say_what_is_wrong() {
        for (text, why) in [
            ("", "no known kind"),
            ("scope:5025", "no known kind"),
            ("tcp://scope", "port is missing"),
            ("tcp://:5025", "no name of a host"),
            ("tcp://scope:0", "no port"),
            ("tcp://scope:70000", "no port"),
            ("TCPIP0::scope::INSTR", "only `::SOCKET`"),
            ("TCPIPx::scope::1::SOCKET", "number of a board"),
            ("GPIB0::5::INSTR", "GPIB is not reached"),
            ("USB0::1::2::3::INSTR", "USB is not reached"),
            ("serial://ttyUSB0", "three slashes"),
            ("serial:///dev/ttyUSB0?baud=fast", "50 to 4000000"),
            ("serial:///dev/ttyUSB0?parity=mark", "none, even or odd"),
            ("serial:///dev/ttyUSB0?speed=9600", "unknown option"),
            ("serial:///dev/ttyUSB0?baud", "no value"),
            ("ASRL0::INSTR", "counted from 1"),
            ("ASRL", "no absolute path"),
        ] {
            let error = text.parse::<Address>().unwrap_err().to_string();
            assert!(error.contains(why), "{text}: {error}");
        }
    }
}
