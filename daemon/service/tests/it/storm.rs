//! Many files at once, in every awkward way at the same time: none is lost, none is taken twice.

use crate::house::House;
use std::fs;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Instant;

/// More than an inotify queue holds (16,384 by default), so that events are lost for sure.
const FILES: usize = 20_000;

#[tokio::test(flavor = "multi_thread")]
async fn storm_loses_nothing() {
    let house = House::new();
    let service = house.start().await;
    let export = house.export();
    let began = Instant::now();
    tokio::task::block_in_place(|| {
        for number in 0..FILES {
            // New nested folders appear while files are written into them.
            let folder = export.join(format!("ward-{}/bed-{}", number % 7, number % 41));
            fs::create_dir_all(&folder).unwrap();
            let path = folder.join(format!("{number}.bin"));
            if number % 100 == 0 {
                // The same size within the same second: only the second version may count as the last.
                fs::write(&path, format!("v1 {number:06}")).unwrap();
            }
            fs::write(&path, format!("v2 {number:06}")).unwrap();
            if number % 100 == 1 {
                // Written aside and renamed in.
                let aside = folder.join(format!(".{number}"));
                fs::rename(&path, &aside).unwrap();
                fs::rename(&aside, &path).unwrap();
            }
        }
        println!("{FILES} files written in {:.1} s", began.elapsed().as_secs_f64());
        house.wait("held", FILES as u64);
        println!("{FILES} files taken in after {:.1} s", began.elapsed().as_secs_f64());
    });
    let held = house.held();
    assert_eq!(held.len(), FILES, "each path stands once");
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn slow_writer_is_read_once_and_whole() {
    let house = House::new();
    // Twenty times the writer's pause, so that a busy machine does not look like a writer that has ended.
    house.set("settle_ms = 100", "settle_ms = 1000");
    let service = house.start().await;
    let path = house.export().join("slow.bin");
    let over = AtomicBool::new(false);
    tokio::task::block_in_place(|| {
        std::thread::scope(|scope| {
            scope.spawn(|| {
                for _ in 0..20 {
                    use std::io::Write;
                    fs::File::options()
                        .append(true)
                        .create(true)
                        .open(&path)
                        .unwrap()
                        .write_all(&[7; 100])
                        .unwrap();
                    std::thread::sleep(std::time::Duration::from_millis(50));
                }
                over.store(true, Ordering::SeqCst);
            });
            house.wait("held", 1);
            assert!(over.load(Ordering::SeqCst), "it was opened while it grew");
        });
    });
    assert_eq!(
        house.held(),
        [("slow.bin".to_owned(), "is in no format that is read here (2000 bytes)".to_owned())]
    );
    assert_eq!(house.count("held"), 1);
    service.stop().await.unwrap();
}
