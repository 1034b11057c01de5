//! Addresses of links: which forms exist, and when two of them mean the same wire.

use crate::document::Text;

/// One spelling for each wire, or a remedy where the text is no address.
pub(super) fn canonical(link: &Text) -> Result<String, &'static str> {
    let text = link.text.trim();
    if let Some(rest) = text.strip_prefix("tcp://") {
        return tcp(rest);
    }
    if let Some(rest) = text.strip_prefix("serial://") {
        return serial(rest);
    }
    visa(text)
}

fn tcp(rest: &str) -> Result<String, &'static str> {
    const HELP: &str = "write tcp://host:port, as in tcp://192.168.1.20:5025";
    let (host, port) = rest.rsplit_once(':').ok_or(HELP)?;
    let port: u16 = port.parse().map_err(|_| HELP)?;
    if host.is_empty() || port == 0 || host.contains(char::is_whitespace) {
        return Err(HELP);
    }
    Ok(format!("tcp {} {port}", host.to_ascii_lowercase()))
}

fn serial(rest: &str) -> Result<String, &'static str> {
    const HELP: &str = "write serial:///dev/ttyUSB0?baud=115200";
    let (path, query) = rest.split_once('?').unwrap_or((rest, ""));
    if !path.starts_with('/') || path.len() < 2 {
        return Err(HELP);
    }
    for part in query.split('&').filter(|part| !part.is_empty()) {
        let (key, value) = part.split_once('=').ok_or(HELP)?;
        let baud_is_number = value.parse::<u32>().is_ok_and(|baud| baud > 0);
        if value.is_empty() || (key == "baud" && !baud_is_number) {
            return Err(HELP);
        }
    }
    Ok(format!("serial {path}"))
}

/// Resource names of VPP-4.3: `TCPIP0::host::5025::SOCKET`, `ASRL/dev/ttyUSB0::INSTR`.
fn visa(text: &str) -> Result<String, &'static str> {
    const HELP: &str =
        "write tcp://host:port, serial:///dev/..., TCPIP0::host::port::SOCKET or ASRL...::INSTR";
    let parts: Vec<&str> = text.split("::").collect();
    let head = parts
        .first()
        .map(|p| p.to_ascii_uppercase())
        .unwrap_or_default();
    match parts.as_slice() {
        [_, host, port, kind]
            if head.starts_with("TCPIP") && kind.eq_ignore_ascii_case("SOCKET") =>
        {
            tcp(&format!("{host}:{port}")).map_err(|_| HELP)
        }
        [port, kind] if head.starts_with("ASRL") && kind.eq_ignore_ascii_case("INSTR") => {
            match port.get(4..) {
                Some(path) if !path.is_empty() => Ok(format!("serial {path}")),
                _ => Err(HELP),
            }
        }
        _ => Err(HELP),
    }
}

/// Baud rate of a serial address, 9600 where it does not say; `None` for other links.
pub(crate) fn baud(link: &str) -> Option<u32> {
    let upper = link.trim().to_ascii_uppercase();
    if !(upper.starts_with("SERIAL://") || upper.starts_with("ASRL")) {
        return None;
    }
    let stated = link
        .split(['?', '&'])
        .find_map(|part| part.strip_prefix("baud=")?.parse().ok());
    Some(stated.unwrap_or(9600))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::diagnostic::FileRole;

    fn of(text: &str) -> Result<String, &'static str> {
        canonical(&Text {
            text: text.to_owned(),
            span: 0..0,
            file: FileRole::Bench,
        })
    }

    #[test]
    fn two_spellings_of_one_wire_are_one() {
        assert_eq!(of("tcp://Scope:5025"), of("TCPIP0::scope::5025::SOCKET"));
        assert_eq!(
            of("serial:///dev/ttyUSB0?baud=9600"),
            of("ASRL/dev/ttyUSB0::INSTR")
        );
        assert_ne!(of("tcp://scope:5025"), of("tcp://scope:5026"));
    }

    #[test]
    fn what_is_no_address_is_refused() {
        for bad in [
            "",
            "tcp://scope",
            "tcp://:5025",
            "tcp://a:99999",
            "serial://ttyUSB0",
            "COM3",
            "serial:///dev/ttyS0?baud=fast",
            "ASRL::INSTR",
            "TCPIP0::host::SOCKET",
        ] {
            assert!(of(bad).is_err(), "{bad}");
        }
    }

    #[test]
    fn baud_is_read() {
        assert_eq!(baud("serial:///dev/ttyUSB0?baud=115200"), Some(115_200));
        assert_eq!(baud("ASRL1::INSTR"), Some(9600));
        assert_eq!(baud("tcp://a:1"), None);
    }
}
