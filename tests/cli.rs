//! The program as its user meets it: the real binary over loopback TCP and pseudo-terminals. What it prints
//! where, its exit codes, how it leaves the bench, and what is in the run folder then. No time is asserted.

#![expect(
    clippy::unwrap_used,
    clippy::panic,
    reason = "a test fails by panicking"
)]

#[path = "cli/stage.rs"]
mod stage;

use std::fs;
use std::process::Command;
use std::time::{Duration, Instant};

use darkline_core::entry::{EntryKind, Flag, RepeatReason, SafeLevel, State};
use rustix::process::Signal;
use serde_json::{Value, json};

use stage::{
    Desk, Instruments, PATIENCE, Running, assert_readable, closed_port, darkline, entries, run,
    sequence, sequence_of, shipped,
};

/// More points than any test here waits for: about a minute.
const LONG: u32 = 201;

/// The mock bench with these faults, as the option that starts it.
fn mock(desk: &Desk, faults: &[&str]) -> String {
    format!("--mock={}", desk.world(faults, "").display())
}

/// `darkline <word>` on the links of a bench that is served already.
fn on_links(word: &str, instruments: &Instruments) -> Command {
    let mut command = darkline(&[word, "--json"]);
    command.arg("--bench").arg(shipped("mock/bench.toml"));
    command.arg("--links").arg(&instruments.links);
    command
}

fn scan_on_links(desk: &Desk, instruments: &Instruments, count: u32) -> Running {
    let mut command = desk.scan(&sequence(count));
    command.arg("--links").arg(&instruments.links);
    Running::start(command)
}

// ------------------------------------------------------------------------------------------------ a whole scan

/// `--mock=` a world without transverse field: six currents are enough for a straight line.
fn straight_world(desk: &Desk) -> String {
    let world = fs::read_to_string(shipped("mock/world.toml")).unwrap();
    let straight = world.replace("\"340 nT\"", "\"0 nT\"");
    assert_ne!(world, straight);
    let world = desk.write("straight.toml", straight);
    format!("--mock={}", world.display())
}

#[test]
fn a_scan_prints_its_answer_and_leaves_its_folder() {
    let desk = Desk::new();
    let mut command = desk.scan(&sequence(6));
    command.arg(straight_world(&desk));
    let ended = run(command);
    ended.assert_code(0).assert_says(&["/6 points"]);
    assert_eq!(ended.output.lines().count(), 1, "{}", ended.output);

    let said = ended.json();
    let folder = desk.run_folder().unwrap();
    assert_eq!(said["run"], folder.display().to_string());
    assert_eq!(said["state"], "finished");
    assert_eq!(said["safe"], true);
    assert_eq!(said["points"]["done"], 6);
    assert_eq!(said["points"]["flagged"], 0);
    assert_eq!(said["points"]["repeated"], 0);
    assert!(said["chi2"].is_f64(), "{said}");
    assert!(said["dof"].is_u64(), "{said}");
    assert_stated(&said["answer"]);
    // Held against the world file, by far more than the fit's own uncertainty and the readback's resolution.
    let constant = said["answer"]["coil_constant"]["value"].as_f64().unwrap();
    assert!((constant - 118.6).abs() < 0.6, "{said}");
    let residual = said["answer"]["residual_field"]["value"].as_f64().unwrap();
    assert!((residual - 212.0).abs() < 10.0, "{said}");

    assert_readable(&folder, State::Finished);
    let svg = fs::read_to_string(folder.join("figure.svg")).unwrap();
    assert!(svg.contains("<svg"));
    let png = fs::read(folder.join("figure.png")).unwrap();
    assert!(png.starts_with(b"\x89PNG\r\n\x1a\n"));
    let as_run = fs::read_to_string(folder.join("bench.toml")).unwrap();
    assert_eq!(
        as_run,
        fs::read_to_string(shipped("mock/bench.toml")).unwrap()
    );
    assert_eq!(
        fs::read_to_string(folder.join("sequence.toml")).unwrap(),
        sequence(6)
    );
}

/// Six statements, each a value with its sigma, or a reason; each with its unit.
#[track_caller]
fn assert_stated(answer: &Value) {
    for (name, unit) in [
        ("coil_constant", "nT/mA"),
        ("residual_field", "nT"),
        ("null_current", "mA"),
        ("transverse_field", "nT"),
        ("linewidth", "kHz"),
        ("contrast", "%"),
    ] {
        let stated = &answer[name];
        assert_eq!(stated["unit"], unit, "{name}: {stated}");
        let measured = stated["value"].is_f64() && stated["sigma"].is_f64();
        let explained = stated["value"].is_null() && stated["reason"].is_string();
        assert!(measured || explained, "{name}: {stated}");
    }
    assert_eq!(answer.as_object().unwrap().len(), 6, "{answer}");
}

#[test]
fn without_json_a_person_reads_the_answer() {
    let desk = Desk::new();
    let mut command = darkline(&["scan"]);
    command.arg(desk.write("sequence.toml", sequence(5)));
    command.arg("--bench").arg(shipped("mock/bench.toml"));
    command.arg("--into").arg(desk.runs());
    command.arg(straight_world(&desk));
    let ended = run(command);
    ended.assert_code(0);
    for word in ["coil constant", "nT/mA", "residual field", "figure.png"] {
        assert!(ended.output.contains(word), "{}", ended.output);
    }
    assert!(!ended.output.contains('\u{1b}'), "{:?}", ended.output);
    assert_readable(&desk.run_folder().unwrap(), State::Finished);
}

// ----------------------------------------------------------------------------------------------------- signals

/// Ends a scan in its middle by what `ask` sends, and asserts that the bench is at rest.
fn stop_by(ask: impl FnOnce(&mut Running)) {
    let desk = Desk::new();
    let instruments = Instruments::serve(&desk);
    let mut scan = scan_on_links(&desk, &instruments, LONG);
    let folder = desk.wait_for_points(&mut scan, 2);
    instruments.assert_lit();
    ask(&mut scan);
    let ended = scan.finish();
    ended
        .assert_code(130)
        .assert_says(&["the scan was stopped"]);
    instruments.assert_dark();
    let said = ended.json();
    assert_eq!(said["state"], "stopped");
    assert_eq!(said["safe"], true);
    assert_eq!(said["run"], folder.display().to_string());
    let done = said["points"]["done"].as_u64().unwrap();
    assert!((2..u64::from(LONG)).contains(&done), "{said}");
    assert_readable(&folder, State::Stopped);
    assert!(
        entries(&folder).iter().any(|entry| matches!(
            &entry.kind,
            EntryKind::LeftSafe { level: SafeLevel::Rest, unreached, .. } if unreached.is_empty()
        )),
        "not said to be at rest"
    );
}

#[test]
fn an_interrupt_ends_a_scan_at_rest() {
    stop_by(|scan| scan.signal(Signal::INT));
}

#[test]
fn a_termination_ends_a_scan_at_rest() {
    stop_by(|scan| scan.signal(Signal::TERM));
}

#[test]
fn a_hangup_without_a_terminal_ends_a_scan_at_rest() {
    stop_by(|scan| scan.signal(Signal::HUP));
}

/// As from an impatient user: again and again, until it has ended. The archive is built by a child, which a
/// terminal would interrupt along with the scan.
#[test]
fn interrupts_without_end_are_no_worse_than_one() {
    stop_by(|scan| {
        let since = Instant::now();
        while scan.is_running() && since.elapsed() < PATIENCE {
            if scan.has_child("rebuild") {
                scan.signal_group(Signal::INT);
            } else {
                scan.signal(Signal::INT);
            }
            std::thread::sleep(Duration::from_millis(2));
        }
    });
}

#[test]
fn a_broken_pipe_does_not_stop_a_scan() {
    let desk = Desk::new();
    // Long enough for another line of progress, and with something to warn of: it does write into the pipe.
    let mut command = desk.scan(&sequence(60));
    command.arg(mock(&desk, &["miss-trigger:1@3", "miss-trigger:1@5"]));
    let (mut scan, output, error) = Running::start_piped(command);
    // What it says until then must be read, or it would wait for a reader.
    let reader = std::thread::spawn(move || {
        let mut lines = std::io::BufReader::new(error);
        let mut line = String::new();
        while std::io::BufRead::read_line(&mut lines, &mut line).unwrap() > 0 {
            if line.contains("/60 points") {
                return lines;
            }
            line.clear();
        }
        panic!("the scan ended without a word");
    });
    let error = reader.join().unwrap();
    assert!(scan.is_running());
    drop(error);
    drop(output);
    assert_eq!(scan.finish().status.code(), Some(0));
    let folder = desk.run_folder().unwrap();
    assert_readable(&folder, State::Finished);
    assert_eq!(stage::completed_points(&folder), 60);
}

// --------------------------------------------------------------------------------------------- who has the bench

#[test]
fn a_second_scan_is_refused_with_the_owner_named_and_the_first_goes_on() {
    let desk = Desk::new();
    let instruments = Instruments::serve(&desk);
    let mut first = scan_on_links(&desk, &instruments, 24);
    desk.wait_for_points(&mut first, 1);
    let elsewhere = Desk::new();
    let second = scan_on_links(&elsewhere, &instruments, 5).finish();
    let owner = format!("in use by process {}", first.id());
    second.assert_code(3).assert_says(&[&owner, "help"]);
    let said = second.json();
    assert_eq!(
        (&said["run"], &said["state"]),
        (&json!(null), &json!("refused"))
    );
    run(on_links("identify", &instruments))
        .assert_code(3)
        .assert_says(&[&owner]);
    let ended = first.finish();
    ended.assert_code(0);
    assert_eq!(ended.json()["points"]["done"], 24);
    assert_eq!(ended.json()["points"]["repeated"], 0);
    instruments.assert_dark();
}

#[test]
fn after_a_kill_the_bench_is_made_safe_by_hand() {
    let desk = Desk::new();
    let instruments = Instruments::serve(&desk);
    let mut scan = scan_on_links(&desk, &instruments, LONG);
    let folder = desk.wait_for_points(&mut scan, 2);
    scan.signal(Signal::KILL);
    assert_eq!(scan.finish().status.code(), None);
    // What this version does not cover, as its README says.
    instruments.assert_lit();
    let safe = run(on_links("safe", &instruments));
    safe.assert_code(0);
    let said = safe.json();
    assert_eq!(said["safe"], true);
    assert_eq!(said["unreached"], json!([]));
    instruments.assert_dark();
    assert_eq!(instruments.ask("oven", "OUTP?"), "0");
    // The journal of the dead run is readable as far as it goes.
    let mut rebuild = darkline(&["rebuild"]);
    rebuild.arg(&folder);
    run(rebuild).assert_code(0);
    assert!(stage::completed_points(&folder) >= 2);
}

#[test]
fn safe_asks_the_scan_that_owns_the_bench() {
    let desk = Desk::new();
    let instruments = Instruments::serve(&desk);
    let mut scan = scan_on_links(&desk, &instruments, LONG);
    let folder = desk.wait_for_points(&mut scan, 2);
    let owner = format!("process {} has the bench", scan.id());
    let safe = run(on_links("safe", &instruments));
    safe.assert_code(0).assert_says(&[&owner]);
    assert_eq!(safe.json()["safe"], true);
    instruments.assert_dark();
    let ended = scan.finish();
    ended.assert_code(3).assert_says(&["the scan was tripped"]);
    let said = ended.json();
    assert_eq!(
        (&said["state"], &said["safe"]),
        (&json!("tripped"), &json!(true))
    );
    assert_readable(&folder, State::Tripped);
}

#[test]
fn identify_names_every_instrument_and_moves_nothing() {
    let desk = Desk::new();
    let instruments = Instruments::serve(&desk);
    let ended = run(on_links("identify", &instruments));
    ended.assert_code(0);
    let said = ended.json();
    let mut names: Vec<_> = said["instruments"]
        .as_array()
        .unwrap()
        .iter()
        .map(|one| {
            (
                one["instrument"].as_str().unwrap(),
                one["identity"].as_str().unwrap(),
            )
        })
        .collect();
    names.sort_unstable();
    assert_eq!(
        names,
        [
            ("coil", "Umbra,BCS-1,2001,2.0"),
            ("control", "Umbra,RFG-2,1002,1.4"),
            ("lock", "Umbra,MON-2,5001,1.2"),
            ("oven", "Umbra,TCU-1,4001,1.0"),
            ("probe", "Umbra,RFG-2,1001,1.4"),
            ("scope", "Umbra,DIG-4,3001,3.1"),
        ]
    );
    instruments.assert_dark();
}

// ------------------------------------------------------------------------------------------ what a bench may do

/// A scan whose instrument says nothing any more from its middle on; it runs beside the test.
fn with_silent(desk: &Desk, name: &str) -> Running {
    let mut command = desk.scan(&sequence(LONG));
    command.arg(mock(desk, &[&format!("silent:{name}@4")]));
    Running::start(command)
}

/// Both take long to be given up, so they run side by side.
#[test]
fn a_bench_that_falls_silent_in_part_is_said_to_be_safe_or_not() {
    let desks = [Desk::new(), Desk::new()];
    let [scope, coil] = [
        with_silent(&desks[0], "scope"),
        with_silent(&desks[1], "coil"),
    ];

    let ended = coil.finish();
    ended
        .assert_code(4)
        .assert_says(&["`coil` MAY NOT BE SAFE", "look at it now"]);
    let said = ended.json();
    assert_eq!(said["safe"], false);
    assert_ne!(said["state"], "finished");

    let ended = scope.finish();
    ended
        .assert_code(3)
        .assert_says(&["`scope`", "answer", "help", "the scan was faulted"]);
    assert!(!ended.error.contains("MAY NOT BE SAFE"), "{}", ended.error);
    let said = ended.json();
    assert_eq!(
        (&said["state"], &said["safe"]),
        (&json!("faulted"), &json!(true))
    );
    assert_eq!(said["fault"]["instrument"], "scope");
    assert_readable(&desks[0].run_folder().unwrap(), State::Faulted);
}

#[test]
fn safe_says_which_instrument_it_cannot_reach() {
    let desk = Desk::new();
    let mut command = darkline(&["safe", "--json"]);
    command.arg("--bench").arg(shipped("mock/bench.toml"));
    command.arg(mock(&desk, &["unreachable:probe"]));
    let ended = run(command);
    ended.assert_code(4).assert_says(&["`probe`"]);
    let said = ended.json();
    assert_eq!(said["safe"], false);
    assert_eq!(said["unreached"][0]["instrument"], "probe");
    assert_eq!(said["readbacks"]["control.output"]["switch"], false);
}

#[test]
fn another_instrument_than_declared_is_refused_before_anything_moves() {
    let desk = Desk::new();
    let mut command = desk.scan(&sequence(5));
    command.arg(mock(&desk, &["wrong-identity:scope"]));
    let ended = run(command);
    ended
        .assert_code(3)
        .assert_says(&["F0208", "`scope`", "`DIG-4`", "help"]);
    assert_nothing_was_set(&desk, &ended.json());
}

#[test]
fn an_instrument_that_cannot_be_reached_is_named_before_anything_moves() {
    let desk = Desk::new();
    let instruments = Instruments::serve(&desk);
    let mut links: Value = serde_json::from_slice(&fs::read(&instruments.links).unwrap()).unwrap();
    let nobody = format!("tcp://127.0.0.1:{}", closed_port());
    for one in links["instruments"].as_array_mut().unwrap() {
        if one["name"] == "scope" {
            one["address"] = json!(nobody);
        }
    }
    let links = desk.write("wrong-links.json", links.to_string());
    let mut command = desk.scan(&sequence(5));
    command.arg("--links").arg(links);
    let ended = run(command);
    ended.assert_code(3).assert_says(&["`scope`", &nobody]);
    assert_nothing_was_set(&desk, &ended.json());
    instruments.assert_dark();
}

/// Refused, with a journal that says so, and no message on the wire that sets a quantity.
#[track_caller]
fn assert_nothing_was_set(desk: &Desk, said: &Value) {
    assert_eq!(
        (&said["run"], &said["state"]),
        (&json!(null), &json!("refused"))
    );
    assert!(
        said["reason"].as_str().unwrap().contains("nothing was set"),
        "{said}"
    );
    let folder = desk.run_folder().unwrap();
    let last = entries(&folder).pop().unwrap().kind;
    assert!(
        matches!(
            last,
            EntryKind::Closed {
                state: State::Faulted,
                ..
            }
        ),
        "{last:?}"
    );
    let wire = fs::read_to_string(folder.join("wire.jsonl")).unwrap();
    for line in wire.lines().filter(|line| line.contains("OUTP")) {
        assert!(
            !line.contains("OUTP ON") && !line.contains("OUTP 1"),
            "{line}"
        );
    }
}

#[test]
fn a_missed_trigger_is_recorded_again_and_counted() {
    let desk = Desk::new();
    let mut command = desk.scan(&sequence(5));
    command.arg(mock(&desk, &["miss-trigger:1"]));
    let ended = run(command);
    ended.assert_code(0);
    let said = ended.json();
    assert_eq!(said["points"]["done"], 5);
    assert!(said["points"]["repeated"].as_u64().unwrap() >= 1, "{said}");
    let folder = desk.run_folder().unwrap();
    let missed = entries(&folder)
        .into_iter()
        .filter(|entry| match &entry.kind {
            EntryKind::Point(point) => point.flags.contains(&Flag::MissedTrigger),
            _ => false,
        })
        .count();
    assert_eq!(missed, 1);
    assert_readable(&folder, State::Finished);
}

#[test]
fn a_laser_lock_lost_in_mid_sweep_is_recorded_again_and_counted() {
    let desk = Desk::new();
    // Sweeps fill nearly all of the time, so that losses at any time fall into one.
    let losses: String = (2..14)
        .map(|second| format!("[[lock.loss]]\nat = \"{second} s\"\nfor = \"0.3 s\"\n"))
        .collect();
    let mut command = desk.scan(&sequence_of(6, "200 ms"));
    command.arg(format!("--mock={}", desk.world(&[], &losses).display()));
    let ended = run(command);
    ended.assert_code(0);
    let said = ended.json();
    assert_eq!(said["points"]["done"], 6);
    let repeated = said["points"]["repeated"].as_u64().unwrap();
    assert!(repeated >= 1, "{said}");
    let folder = desk.run_folder().unwrap();
    let for_a_guard = entries(&folder)
        .into_iter()
        .filter(|entry| {
            matches!(
                entry.kind,
                EntryKind::Repeated {
                    reason: RepeatReason::Guard,
                    ..
                }
            )
        })
        .count();
    assert!(for_a_guard >= 1);
    assert_readable(&folder, State::Finished);
}

// ------------------------------------------------------------------------------------------------------- files

fn check(sequence: &std::path::Path, bench: &std::path::Path, json: bool) -> stage::Ended {
    let mut command = darkline(&["check"]);
    command.arg(sequence).arg("--bench").arg(bench);
    if json {
        command.arg("--json");
    }
    run(command)
}

#[test]
fn every_shipped_sequence_passes_check() {
    let mut checked = 0;
    for entry in fs::read_dir(shipped("sequences")).unwrap() {
        let path = entry.unwrap().path();
        let ended = check(&path, &shipped("mock/bench.toml"), true);
        ended.assert_code(0);
        let said = ended.json();
        assert_eq!(said["ok"], true, "{}: {said}", path.display());
        assert_eq!(said["findings"], json!([]), "{}", path.display());
        let forecast = &said["forecast"];
        assert!(forecast["points"].as_u64().unwrap() > 0, "{said}");
        assert!(forecast["seconds"]["total"].as_f64().unwrap() > 0.0);
        assert!(!forecast["extremes"].as_array().unwrap().is_empty());
        checked += 1;
    }
    assert!(checked >= 6, "{checked} shipped sequences");
}

#[test]
fn a_good_file_is_told_what_would_happen() {
    let ended = check(
        &shipped("sequences/coil-constant.toml"),
        &shipped("mock/bench.toml"),
        false,
    );
    ended.assert_code(0);
    for word in ["points", "traces", "run.h5", "coil.current", "limit"] {
        assert!(ended.output.contains(word), "{}", ended.output);
    }
}

#[test]
fn a_bad_file_is_told_where_what_and_the_remedy() {
    let desk = Desk::new();
    let bad = sequence(6).replace("\"-20 mA\"", "\"-20 mV\"");
    let bad = desk.write("bad.toml", bad);
    let line = 1 + fs::read_to_string(&bad)
        .unwrap()
        .lines()
        .position(|line| line.contains("mV"))
        .unwrap();
    let bench = shipped("mock/bench.toml");
    let ended = check(&bad, &bench, false);
    let place = format!("{}:{line}:12", bad.display());
    ended
        .assert_code(2)
        .assert_says(&["error[D0201]", &place, "^^^", "nothing was started"]);
    assert_eq!(ended.output, "");

    let ended = check(&bad, &bench, true);
    ended.assert_code(2);
    let said = ended.json();
    assert_eq!(said["ok"], false);
    let found = &said["findings"][0];
    assert_eq!(
        (&found["code"], &found["line"]),
        (&json!("D0201"), &json!(line))
    );
    assert_eq!(found["file"], bad.display().to_string());

    // A scan refuses it with the same words, and makes no folder.
    let mut command = desk.scan(&fs::read_to_string(&bad).unwrap());
    command.arg("--mock");
    let ended = run(command);
    ended.assert_code(2).assert_says(&["error[D0201]"]);
    assert_eq!(ended.json()["state"], "refused");
    assert!(desk.run_folder().is_none());
}

#[test]
fn help_is_given_where_a_key_is_misspelt() {
    let desk = Desk::new();
    let bad = desk.write("bad.toml", sequence(6).replace("shape  =", "shap  ="));
    check(&bad, &shipped("mock/bench.toml"), false)
        .assert_code(2)
        .assert_says(&["unknown key `shap`", "help", "`shape`"]);
}

#[test]
fn what_is_no_file_of_ours_is_refused_without_a_panic() {
    let desk = Desk::new();
    let good = desk.write("good.toml", sequence(6));
    let bench = shipped("mock/bench.toml");
    let junk: Vec<u8> = (0..4096_u32).map(|n| (n * 151 + n / 7) as u8).collect();
    let junk = desk.write("junk.toml", junk);
    let zeros = desk.write("zeros.toml", [0_u8; 64]);
    let empty = desk.write("empty.toml", "");
    let missing = desk.path("missing.toml");
    let folder = desk.runs();
    fs::create_dir(&folder).unwrap();
    for wrong in [&junk, &zeros, &empty, &missing, &folder] {
        let name = wrong.display().to_string();
        for json in [false, true] {
            let ended = check(wrong, &bench, json);
            ended.assert_code(2);
            if json {
                let said = ended.json();
                assert_eq!(said["ok"], false);
                assert!(said.to_string().contains(&name), "{name}: {said}");
            } else {
                ended.assert_says(&[&name]);
            }
            let ended = check(&good, wrong, json);
            ended.assert_code(2);
            if !json {
                ended.assert_says(&[&name]);
            }
        }
        let mut safe = darkline(&["safe", "--mock", "--bench"]);
        safe.arg(wrong);
        run(safe).assert_code(2).assert_says(&[&name]);
        let mut mock = darkline(&["mock", "--world"]);
        mock.arg(wrong);
        if wrong != &empty {
            run(mock).assert_code(2).assert_says(&[&name]);
        }
        let mut rebuild = darkline(&["rebuild"]);
        rebuild.arg(wrong);
        run(rebuild).assert_code(2).assert_says(&[&name]);
    }
    let mut scan = desk.scan(&sequence(5));
    scan.arg("--links").arg(&junk);
    let ended = run(scan);
    ended
        .assert_code(2)
        .assert_says(&[&junk.display().to_string()]);
    assert_eq!(ended.json()["state"], "refused");
}

#[test]
fn a_wrong_command_line_is_exit_code_two() {
    run(darkline(&["scan"])).assert_code(2);
    run(darkline(&["sweep"])).assert_code(2);
    run(darkline(&["--version"])).assert_code(0);
}
