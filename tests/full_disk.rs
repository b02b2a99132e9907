//! A full disk: the notice goes out at once from memory, marked, and what was held is written when there is room again.
//!
//! The disk is a small tmpfs in a mount namespace of the daemon's own. Where that isn't allowed (no root), the test
//! says so and only the walk's own tests with a page limit cover the case.

#![allow(clippy::print_stdout, reason = "what the drill met is worth reading")]

mod support;

use std::fs;
use std::io::Write;
use std::path::PathBuf;
use std::process::Command;
use std::time::Duration;

use support::{Bench, Line, Phone, wait_for};

const NAME: &str =
    "with_the_disk_full_the_notice_goes_out_marked_and_everything_held_is_written_when_there_is_room";
const INSIDE: &str = "RAILTIDE_TEST_IN_NAMESPACE";

/// Runs this test again inside a mount namespace of its own; says whether that's the present run.
fn inside_a_namespace() -> bool {
    if std::env::var_os(INSIDE).is_some() {
        return true;
    }
    let allowed = Command::new("unshare").args(["--mount", "true"]).status().is_ok_and(|s| s.success());
    if !allowed {
        println!("skipped: no mount namespace is allowed here");
        return false;
    }
    let again = Command::new("unshare")
        .arg("--mount")
        .arg(std::env::current_exe().unwrap())
        .args(["--exact", NAME, "--nocapture"])
        .env(INSIDE, "1")
        .status()
        .unwrap();
    assert!(again.success(), "the test inside the namespace failed");
    false
}

/// A disk of 1 MiB at `<folder>/disk`.
fn mount_small_disk(bench: &Bench) -> PathBuf {
    let disk = bench.folder.path().join("disk");
    fs::create_dir(&disk).unwrap();
    let mounted =
        Command::new("mount").args(["-t", "tmpfs", "-o", "size=1m", "railtide-test"]).arg(&disk).status();
    assert!(mounted.unwrap().success(), "a namespace of our own lets us mount");
    disk
}

/// Writes until there's no room, to the last byte.
fn fill(folder: &std::path::Path) {
    let mut filler = fs::File::create(folder.join("filler")).unwrap();
    for size in [65_536, 4_096, 512, 1] {
        while filler.write_all(&vec![0; size]).is_ok() {}
    }
}

#[test]
fn with_the_disk_full_the_notice_goes_out_marked_and_everything_held_is_written_when_there_is_room() {
    if !inside_a_namespace() {
        return;
    }
    let receiver = Phone::start();
    let mut line = Line::new();
    let bench = Bench::hall(&line.device(), &receiver.url());
    bench.change_config(r#"path = "hall.db""#, r#"path = "disk/hall.db""#);
    let disk = mount_small_disk(&bench);
    let mut daemon = bench.start();
    let mut sent = 0;
    let mut send = |mains_mv: i64, sent: &mut i64| {
        for _ in 0..5 {
            line.send(&[("mains", mains_mv)]);
            *sent += 1;
            std::thread::sleep(Duration::from_millis(20));
        }
    };

    wait_for("the first readings are stored", || {
        send(226_000, &mut sent);
        (bench.count("SELECT count(*) FROM open")? > 0).then_some(())
    });
    fill(&disk);
    wait_for("the daemon says that the record can't be written", || {
        send(226_000, &mut sent);
        bench.log().contains("the record can't be written").then_some(())
    });
    wait_for("the notice arrives all the same", || {
        send(240_000, &mut sent);
        (!receiver.notices().is_empty()).then_some(())
    });
    let notice = receiver.notices().remove(0);
    assert_eq!(notice["condition"], "rail-high");
    assert_eq!(notice["recorded"], false);
    assert!(notice["title"].as_str().unwrap().contains("not recorded"), "{notice}");
    assert!(daemon.is_running());

    fs::remove_file(disk.join("filler")).unwrap();
    wait_for("what was held is written", || {
        send(240_000, &mut sent);
        (bench.count("SELECT count(*) FROM journal")? > 0).then_some(())
    });
    wait_for("every reading that was sent is in the record", || {
        (bench.count("SELECT count(*) FROM open")? == sent).then_some(())
    });
    assert!(daemon.stop().success());
    assert_eq!(receiver.notices().len(), 1, "told once");
    assert!(bench.log().contains("the record can be written again"), "{}", bench.log());
}
