//! What lands in the export folder ends in exactly one outcome, and nothing there disturbs its neighbours.

use crate::house::House;
use std::fs::{self, File};
use std::time::Duration;

#[tokio::test(flavor = "multi_thread")]
async fn hostile_entries_are_held_each_with_its_reason() {
    let house = House::new();
    let export = house.export();
    fs::write(export.join("empty.dcm"), "").unwrap();
    fs::create_dir(export.join("folder.dcm")).unwrap();
    rustix::fs::mkfifoat(rustix::fs::CWD, export.join("pipe.dcm"), rustix::fs::Mode::RUSR).unwrap();
    std::os::unix::fs::symlink(house.settings_file(), export.join("link.dcm")).unwrap();
    File::create(export.join("huge.dcm")).unwrap().set_len(1 << 30).unwrap();
    fs::write(export.join("noise.bin"), [0x9f; 300]).unwrap();
    fs::write(export.join("lonely.dat"), [0; 300]).unwrap();
    fs::write(
        export.join("pairless.hea"),
        "pairless 1 250 10\npairless.dat 16 200 12 0 0 0 0 II\n",
    )
    .unwrap();
    fs::write(
        export.join("elsewhere.hea"),
        "elsewhere 1 250 10\n../secret.dat 16 200 12 0 0 0 0 II\n",
    )
    .unwrap();
    fs::write(export.join("unfinished.part"), "x").unwrap();
    let names = ["empty.dcm", "folder.dcm", "huge.dcm", "link.dcm", "noise.bin", "pipe.dcm"];

    let service = house.start().await;
    tokio::task::block_in_place(|| house.wait("held", 9));
    let held = house.held();
    let reason = |name: &str| {
        held.iter()
            .find(|(known, _)| known == name)
            .map_or_else(|| panic!("{name}: {held:?}"), |(_, why)| why.clone())
    };
    assert!(names.iter().all(|name| !reason(name).is_empty()));
    assert_eq!(reason("empty.dcm"), "is empty");
    assert_eq!(reason("folder.dcm"), "is a folder, not a file");
    assert_eq!(reason("pipe.dcm"), "is a pipe, not a file");
    assert_eq!(reason("link.dcm"), "is a link to another file; export the file itself");
    assert_eq!(
        reason("huge.dcm"),
        "holds 1024 MiB; files up to 8 MiB are read (`largest_file_mib` in the settings)"
    );
    assert_eq!(reason("noise.bin"), "is in no format that is read here (300 bytes)");
    assert!(reason("lonely.dat").contains("header (.hea) has not come"));
    assert!(
        reason("pairless.hea").contains("names a sample file that is gone"),
        "{}",
        reason("pairless.hea")
    );
    assert!(!reason("elsewhere.hea").is_empty());
    assert_eq!(held.len(), 9);

    // Each was looked at once: another pass finds nothing new.
    let mut passes = service.pulse().passes();
    let so_far = passes.borrow().0;
    service.look();
    tokio::time::timeout(
        Duration::from_secs(30),
        passes.wait_for(|(count, _)| *count > so_far + 1),
    )
    .await
    .unwrap()
    .unwrap();
    assert_eq!(house.count("held"), 9);
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn replaced_folder_is_looked_at_again() {
    let house = House::new();
    let service = house.start().await;
    fs::remove_dir(house.export()).unwrap();
    let mut passes = service.pulse().passes();
    tokio::time::timeout(Duration::from_secs(30), passes.wait_for(|(_, pass)| pass.blind))
        .await
        .unwrap()
        .unwrap();
    fs::create_dir(house.export()).unwrap();
    fs::write(house.export().join("later.bin"), "xyz").unwrap();
    tokio::task::block_in_place(|| house.wait("held", 1));
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn name_that_is_not_utf8_is_taken_like_any_other() {
    use std::os::unix::ffi::OsStrExt;
    let house = House::new();
    let name = std::ffi::OsStr::from_bytes(b"caf\xe9.bin");
    fs::write(house.export().join(name), "xyz").unwrap();
    let service = house.start().await;
    tokio::task::block_in_place(|| house.wait("held", 1));
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn file_exported_again_under_its_name_stands_as_its_last_version() {
    let house = House::new();
    fs::write(house.export().join("x.bin"), "first").unwrap();
    let service = house.start().await;
    tokio::task::block_in_place(|| house.wait("held", 1));
    fs::write(house.export().join("x.bin"), "").unwrap();
    tokio::task::block_in_place(|| house.wait("held", 2));
    assert_eq!(house.held(), [("x.bin".to_owned(), "is empty".to_owned())]);
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn backup_of_a_running_service_can_be_started_from() {
    use ebbmark::store::{Reader, StorePath, backup};
    let house = House::new();
    fs::write(house.export().join("x.bin"), "first").unwrap();
    let service = house.start().await;
    tokio::task::block_in_place(|| house.wait("held", 1));
    let copy = StorePath::new(house.path().join("copy"));
    assert_eq!(backup(&house.store(), &copy).unwrap().contents, 1);
    fs::write(house.export().join("y.bin"), "second").unwrap();
    tokio::task::block_in_place(|| house.wait("held", 2));
    let again = backup(&house.store(), &copy).unwrap();
    assert_eq!((again.contents, again.there), (1, 1));
    service.stop().await.unwrap();

    let reader = Reader::open(&copy).unwrap();
    assert_eq!(reader.audit().unwrap(), Reader::open(&house.store()).unwrap().audit().unwrap());
    for file in reader.held().unwrap() {
        assert!(copy.contents().get(&file.hash.unwrap()).unwrap().is_some());
    }
}
