//! Command maps: those built in are right, a user's is found first, and wrong ones say where and why.

use std::fs;

use darkline_core::channel;
use darkline_drivers::map::{BUILT_IN, CommandMap};

#[test]
fn every_role_has_its_map_with_all_it_offers() {
    for role in channel::Role::ALL {
        let map = CommandMap::find(&format!("scpi-{}", role.name()), &[]).unwrap();
        assert_eq!(map.role, role);
        for offer in role.offers() {
            let entry = &map.quantities[offer.property];
            let settable = offer.access == channel::Access::Settable;
            assert_eq!(
                entry.say.is_some(),
                settable,
                "{} {}",
                map.name,
                offer.property
            );
        }
        assert_eq!(map.sweep.is_some(), role == channel::Role::RfGenerator);
        assert_eq!(map.record.is_some(), role == channel::Role::Digitizer);
    }
    assert_eq!(BUILT_IN.len(), channel::Role::ALL.len());
}

#[test]
fn a_users_map_is_found_first() {
    let folder = tempfile::tempdir().unwrap();
    let folders = [folder.path().to_owned()];
    let text = "role = \"monitor\"\n[quantity.level]\nmeasure = \"READ?\"\nhear = \"{mV}\"\n";
    fs::write(folder.path().join("scpi-monitor.toml"), text).unwrap();
    fs::write(folder.path().join("mine.toml"), text).unwrap();
    for name in ["scpi-monitor", "mine", "mine.toml"] {
        let map = CommandMap::find(name, &folders).unwrap();
        assert_eq!(
            map.quantities["level"].measure.as_deref(),
            Some("READ?"),
            "{name}"
        );
    }
    let error = CommandMap::find("nobody", &folders)
        .unwrap_err()
        .to_string();
    assert!(
        error.contains("no command map `nobody`") && error.contains("scpi-monitor"),
        "{error}"
    );
    let error = CommandMap::find("nobody.toml", &folders)
        .unwrap_err()
        .to_string();
    assert!(error.contains("cannot be read"), "{error}");
}

#[test]
fn wrong_maps_say_where_and_why() {
    for (text, line, why) in [
        ("", 1, "missing field `role`"),
        ("role = \"oscilloscope\"", 1, "is no role"),
        ("role = \"monitor\"\npase = 3", 2, "unknown field `pase`"),
        (
            "role = \"monitor\"\n[talk]\npase = \"1 s\"",
            3,
            "expected one of",
        ),
        (
            "role = \"monitor\"\n[talk]\npace = \"1 V\"",
            3,
            "`V` measures",
        ),
        (
            "role = \"monitor\"\n[talk]\nends = \"cr\"",
            3,
            "`lf` or `crlf`",
        ),
        (
            "role = \"monitor\"\n\n[talk]\nenter = [\"*RST\"]",
            4,
            "changes settings",
        ),
        (
            "role = \"monitor\"\n[talk]\nenter = [\"SYST:REM\", \"OUTP ON\"]",
            3,
            "changes settings",
        ),
        (
            "role = \"current-supply\"\n[talk]\nleave = [\"SOURCE:CURRENT:LEVEL 0\"]\n[quantity.current]\nsay = \"SOUR:CURR {A}\"\nreadback = \"SOUR:CURR?\"",
            3,
            "sets current",
        ),
        (
            "role = \"monitor\"\n[talk]\nsentinel = { kind = \"own\", say = \"A\" }",
            3,
            "a sentinel is",
        ),
        (
            "role = \"current-supply\"\n[quantity.current]\nsay = \"CURR\"\nreadback = \"CURR?\"",
            3,
            "no place for the value",
        ),
        (
            "role = \"current-supply\"\n[quantity.current]\nsay = \"CURR {A}\"",
            2,
            "must be read back",
        ),
        (
            "role = \"current-supply\"\n[quantity.current]\nsay = \"CURR {furlong}\"\nreadback = \"CURR?\"",
            3,
            "neither a unit",
        ),
        (
            "role = \"current-supply\"\n[quantity.current]\nsay = \"CURR {A}\"\nreadback = \"CURR?\"\nresolution = \"1 V\"",
            5,
            "`V` measures",
        ),
        (
            "role = \"monitor\"\n[quantity.level]\nmeasure = \"READ?\"",
            2,
            "`hear` is missing",
        ),
        ("role = \u{0}", 1, ""),
    ] {
        let error = CommandMap::parse(text, "bad.toml").unwrap_err();
        assert_eq!(error.line, Some(line), "{text}: {error}");
        assert!(error.message.contains(why), "{text}: {error}");
        assert!(error.to_string().starts_with(&format!("bad.toml:{line}: ")));
    }
    let entering = "role = \"monitor\"\n[talk]\nenter = [\"SYST:REM\"]\nleave = [\"SYST:LOC\"]";
    CommandMap::parse(entering, "good.toml").unwrap();
}
