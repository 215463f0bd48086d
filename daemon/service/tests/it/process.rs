//! The program as a supervisor meets it: signs of life, signals, a full disk.

use crate::files::{haloperidol, patient, potassium};
use crate::house::House;
use ebbmark::clock::Clock;
use ebbmark::store::Reader;
use std::collections::BTreeMap;
use std::os::unix::net::UnixDatagram;
use std::process::{Child, Command, Output, Stdio};
use std::time::{Duration, Instant};

fn watch(house: &House) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_ebbmark"));
    command.arg("watch").current_dir(house.path()).stdout(Stdio::null()).stderr(Stdio::null());
    command
}

fn signal(service: &Child, signal: rustix::process::Signal) {
    let pid = rustix::process::Pid::from_raw(i32::try_from(service.id()).unwrap()).unwrap();
    rustix::process::kill_process(pid, signal).unwrap();
}

#[test]
fn supervisor_is_told_of_ready_life_and_stop() {
    let house = House::new();
    let path = house.path().join("notify");
    let socket = UnixDatagram::bind(&path).unwrap();
    socket.set_read_timeout(Some(Duration::from_secs(60))).unwrap();
    let mut service =
        watch(&house).env("NOTIFY_SOCKET", &path).env("WATCHDOG_USEC", "400000").spawn().unwrap();
    let told = |word: &str| {
        let until = Instant::now() + Duration::from_secs(60);
        let mut buffer = [0; 256];
        loop {
            assert!(Instant::now() < until, "{word} was not said");
            let length = socket.recv(&mut buffer).unwrap();
            if String::from_utf8_lossy(&buffer[..length]).contains(word) {
                return;
            }
        }
    };
    told("READY=1");
    told("WATCHDOG=1");
    told("WATCHDOG=1");
    signal(&service, rustix::process::Signal::TERM);
    told("STOPPING=1");
    assert!(service.wait().unwrap().success());
}

#[test]
fn hangup_puts_a_changed_protocol_in_force() {
    let house = House::new();
    let mut service = watch(&house).spawn().unwrap();
    let texts = || {
        Reader::open(&house.store())
            .and_then(|reader| reader.texts())
            .map_or(0, |texts| texts.len())
    };
    let wait = |count: usize| {
        let until = Instant::now() + Duration::from_secs(60);
        while texts() < count {
            assert!(Instant::now() < until, "{} of {count} texts", texts());
            std::thread::sleep(Duration::from_millis(20));
        }
    };
    wait(2);
    let text = std::fs::read_to_string(house.path().join("protocol.toml")).unwrap();
    house.write("protocol.toml", text.replace("answer_within_min = 15", "answer_within_min = 20"));
    // Signals are listened to before the rulebooks come into force.
    signal(&service, rustix::process::Signal::HUP);
    wait(3);
    signal(&service, rustix::process::Signal::TERM);
    assert!(service.wait().unwrap().success());
}

/// Runs a script in a name space of its own, where it may mount a small disk. `None` where this machine won't.
fn with_small_disk(house: &House, script: &str) -> Option<Output> {
    let run = |script: &str| {
        Command::new("unshare")
            .args(["--mount", "--map-root-user", "sh", "-euc", script])
            .env("EBBMARK", env!("CARGO_BIN_EXE_ebbmark"))
            .current_dir(house.path())
            .output()
            .ok()
    };
    let probe = run("mkdir -p probe && mount -t tmpfs -o size=1m tmpfs probe")?;
    if !probe.status.success() {
        return None;
    }
    run(script)
}

/// The disk fills at some moment; the service stops with 3 rather than going on without its memory. With room again
/// everything is there that should be, and once.
#[test]
fn full_disk_stops_the_service_and_loses_nothing() {
    const PATIENTS: usize = 40;
    let points = std::env::var("EBBMARK_FULL_DISKS")
        .ok()
        .and_then(|text| text.parse().ok())
        .unwrap_or(4_usize);
    for point in 0..points {
        let house = House::new();
        let now = Clock::System.now();
        for number in 0..PATIENTS {
            house.export_file(&format!("p{number}.csv"), patient(number, now));
            house.export_file(&format!("m{number}.csv"), haloperidol(number, now));
            house.export_file(&format!("r{number}.csv"), potassium(number, "2.7", "F", now, 20));
        }
        // From hardly more than the empty store to nearly enough.
        let kib = 900 + 3_000 * point / points;
        let files = 3 * PATIENTS;
        let script = format!(
            "mkdir store; mount -t tmpfs -o size={kib}k tmpfs store
             code=0; timeout 60 $EBBMARK watch 2> log || code=$?
             test $code = 3 || {{ echo \"ended with $code\"; cat log; exit 1; }}
             cp -r store kept"
        );
        let Some(output) = with_small_disk(&house, &script) else {
            println!("!! no small disk can be mounted here: full disks were NOT tested");
            return;
        };
        let told = String::from_utf8_lossy(&output.stdout).into_owned()
            + &String::from_utf8_lossy(&output.stderr);
        assert!(output.status.success(), "{kib} KiB: {told}");
        // The disk was only there in the script's own name space; what was on it goes on a larger one.
        std::fs::remove_dir(house.path().join("store")).unwrap();
        std::fs::rename(house.path().join("kept"), house.path().join("store")).unwrap();
        let before = house.count("accepted");
        let log = std::fs::File::create(house.path().join("log")).unwrap();
        let mut service = watch(&house).stderr(log).spawn().unwrap();
        house.wait("accepted", files as u64);
        // Everything may have been taken before the disk was full, and signals are listened to only a little later.
        let until = Instant::now() + Duration::from_secs(60);
        while !std::fs::read_to_string(house.path().join("log")).unwrap().contains("watching") {
            assert!(Instant::now() < until, "it does not start");
            std::thread::sleep(Duration::from_millis(20));
        }
        signal(&service, rustix::process::Signal::TERM);
        let ended = service.wait().unwrap();
        let log = std::fs::read_to_string(house.path().join("log")).unwrap();
        assert!(ended.success(), "{kib} KiB: {ended}\n{log}");

        let reader = Reader::open(&house.store()).unwrap();
        assert_eq!(reader.audit().unwrap().broken, None);
        assert_eq!(
            reader.file_counts().unwrap(),
            BTreeMap::from([("accepted".to_owned(), files as u64)])
        );
        let calls = reader
            .alerts(false)
            .unwrap()
            .into_iter()
            .filter(|row| row.alert.tier.as_str() == "call")
            .count();
        assert_eq!(calls, PATIENTS, "{kib} KiB");
        println!("full at {kib} KiB after {before} of {files} files: nothing is missing");
    }
}
