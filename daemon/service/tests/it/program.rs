//! The program as a person or a script meets it: what it prints and how it ends.

use crate::house::House;
use serde_json::Value;
use std::path::Path;
use std::process::{Command, Output};

fn ebbmark(arguments: &[&str], folder: &Path) -> Output {
    Command::new(env!("CARGO_BIN_EXE_ebbmark"))
        .args(arguments)
        .current_dir(folder)
        .output()
        .unwrap()
}

fn code(output: &Output) -> i32 {
    output.status.code().unwrap()
}

fn out(output: &Output) -> String {
    String::from_utf8(output.stdout.clone()).unwrap()
}

fn err(output: &Output) -> String {
    String::from_utf8(output.stderr.clone()).unwrap()
}

/// A WFDB record of two flat leads: readable, and nothing can be told from it.
fn flat(folder: &Path, name: &str) {
    let leads = ["I", "II"].map(|lead| format!("{name}.dat 16 1000/mV 16 0 0 0 0 {lead}\n"));
    std::fs::write(
        folder.join(format!("{name}.hea")),
        format!("{name} 2 500 5000\n{}", leads.concat()),
    )
    .unwrap();
    std::fs::write(folder.join(format!("{name}.dat")), vec![0_u8; 5000 * 2 * 2]).unwrap();
}

/// The contract of `measure --json`: these names, in this order, and null for what can't be told.
#[test]
fn measure_gives_one_line_for_each_file_in_the_order_given() {
    let folder = tempfile::tempdir().unwrap();
    let names: Vec<String> = (0..40).rev().map(|number| format!("r{number}.hea")).collect();
    (0..40).for_each(|number| flat(folder.path(), &format!("r{number}")));
    let mut arguments = vec!["measure", "--json", "--beats"];
    arguments.extend(names.iter().map(String::as_str));
    arguments.push("missing.hea");
    let output = ebbmark(&arguments, folder.path());
    assert_eq!(code(&output), 1, "one file is missing");

    let text = out(&output);
    let lines: Vec<Value> = text.lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    let files: Vec<&str> = lines.iter().map(|line| line["file"].as_str().unwrap()).collect();
    assert_eq!(files[..40], names);
    assert_eq!(files[40], "missing.hea");
    assert_eq!(lines[40]["answer"], "none");
    assert!(lines[40]["why"][0].as_str().unwrap().starts_with("can't be read"));

    let first = text.lines().next().unwrap();
    let keys = [
        "file",
        "sampling_hz",
        "duration_s",
        "leads",
        "recorded_at",
        "answer",
        "why",
        "rr_ms",
        "rate_bpm",
        "rhythm",
        "qrs_ms",
        "qt_ms",
        "qt_doubt_ms",
        "jt_ms",
        "t_end_method",
        "qt_by_method_ms",
        "qtc_ms",
        "per_lead",
        "beats",
    ];
    let places: Vec<usize> =
        keys.iter().map(|key| first.find(&format!("\"{key}\":")).unwrap()).collect();
    assert!(places.is_sorted(), "{first}");
    assert_eq!(lines[0].as_object().unwrap().len(), keys.len());
    assert_eq!((&lines[0]["sampling_hz"], &lines[0]["duration_s"]), (&500.0.into(), &10.0.into()));
    assert_eq!((&lines[0]["answer"], &lines[0]["qt_ms"]), (&"none".into(), &Value::Null));
    assert_eq!(lines[0]["qtc_ms"]["bazett"], Value::Null);
    for formula in ["bazett", "fridericia", "framingham", "hodges", "rautaharju", "dmitrienko"] {
        assert!(lines[0]["qtc_ms"].as_object().unwrap().contains_key(formula));
    }
}

#[test]
fn beats_come_only_when_asked_for() {
    let folder = tempfile::tempdir().unwrap();
    flat(folder.path(), "a");
    let line: Value =
        serde_json::from_str(&out(&ebbmark(&["measure", "--json", "a.hea"], folder.path())))
            .unwrap();
    assert!(line.as_object().unwrap().get("beats").is_none());
}

#[test]
fn wrong_use_ends_with_2_and_says_what_is_wrong() {
    let house = House::new();
    let table: &[(&[&str], &str)] = &[
        (&[], "Usage"),
        (&["measure"], "required"),
        (&["measure", "--json", "--from", "5", "--to", "5", "a.hea"], "is not before"),
        (&["measure", "--json", "--from", "-1", "a.hea"], "a number of seconds from 0 is expected"),
        (&["measure", "--beats", "a.hea"], "--json"),
        (&["check", "--settings", "nowhere.toml"], "nowhere.toml: can't be read"),
        (&["held", "--settings", "nowhere.toml"], "nowhere.toml: can't be read"),
    ];
    for (arguments, expected) in table {
        let output = ebbmark(arguments, house.path());
        assert_eq!(code(&output), 2, "{arguments:?}: {}", err(&output));
        assert!(err(&output).contains(expected), "{arguments:?}: {}", err(&output));
    }
}

#[test]
fn check_points_at_the_mistake() {
    let house = House::new();
    house.set("scan_every_s = 1", "scan_evry_s = 1");
    let output = ebbmark(&["check"], house.path());
    assert_eq!(code(&output), 2);
    let text = err(&output);
    assert!(
        text.contains("ebbmark.toml, line 14, column 1: unknown field `scan_evry_s`"),
        "{text}"
    );
    assert!(text.contains("hint: did you mean `scan_every_s`?"), "{text}");
}

#[test]
fn without_a_store_lists_say_so_and_end_with_3() {
    let house = House::new();
    for command in ["held", "alerts", "audit"] {
        let output = ebbmark(&[command], house.path());
        assert_eq!(code(&output), 3, "{command}");
        assert!(err(&output).contains("cannot open the store"), "{command}: {}", err(&output));
    }
}

#[tokio::test(flavor = "multi_thread")]
async fn held_lists_name_and_reason_while_the_service_runs() {
    let house = House::new();
    std::fs::write(house.export().join("x.bin"), "xyz").unwrap();
    let service = house.start().await;
    tokio::task::block_in_place(|| house.wait("held", 1));
    let output = ebbmark(&["held"], house.path());
    assert_eq!(code(&output), 1);
    assert!(
        out(&output).contains("x.bin\n    held: is in no format that is read here (3 bytes)\n"),
        "{}",
        out(&output)
    );
    let line: Value =
        serde_json::from_str(&out(&ebbmark(&["held", "--json"], house.path()))).unwrap();
    assert_eq!(
        (&line["file"], &line["outcome"], &line["size"]),
        (&"x.bin".into(), &"held".into(), &3.into())
    );
    let output = ebbmark(&["audit"], house.path());
    assert_eq!(code(&output), 0);
    assert!(out(&output).starts_with("the chain is whole"));
    let output = ebbmark(&["alerts"], house.path());
    assert_eq!(
        (code(&output), out(&output).as_str()),
        (0, "no alert is open; that does not mean that there is no risk\n")
    );
    service.stop().await.unwrap();
}

/// The reader's table: good rows compared, bad ones named, and a tracing without a QT told as such.
#[test]
fn agree_names_what_it_could_not_use() {
    let folder = tempfile::tempdir().unwrap();
    flat(folder.path(), "a");
    std::fs::write(
        folder.path().join("t.csv"),
        "file,qt_ms,lead\na.hea,400,II\nb.hea,410,\nc.hea,0.4,\n",
    )
    .unwrap();
    let output = ebbmark(&["agree", "t.csv"], folder.path());
    assert_eq!(code(&output), 1, "a row and a file could not be used");
    assert!(
        out(&output)
            .contains("2 tracings with a local reading; no QT told by the engine on 1 of them")
    );
    assert!(err(&output).contains("line 4 of the table") && err(&output).contains("b.hea"));
    assert_eq!(code(&ebbmark(&["agree", "none.csv"], folder.path())), 2);
}

/// The committee's figures carry no patient, and a period that ends before it begins is wrong use.
#[test]
fn report_needs_a_period_and_a_store() {
    let folder = tempfile::tempdir().unwrap();
    let backwards =
        ["report", "--from", "2027-03-02", "--to", "2027-03-01", "--settings", "none.toml"];
    assert_eq!(code(&ebbmark(&backwards, folder.path())), 2);
}
