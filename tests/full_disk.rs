//! A full disk: the notice goes out at once from memory, marked, and what was held is written when there is room again.
//!
//! The disk is a small tmpfs in a mount namespace of the daemon's own. Where that isn't allowed (no root), the test
//! says so and only the walk's own tests with a page limit cover the case.

mod support;

use std::fs;
use std::io::Write;
use std::path::PathBuf;
use std::process::Command;
use std::time::Duration;

use support::{Bench, Daemon, Line, Phone, wait_for};

/// The daemon inside a mount namespace where `<folder>/disk` is a tmpfs of 1 MiB; `None` where that isn't allowed.
fn start_on_small_disk(bench: &Bench) -> Option<(Daemon, PathBuf)> {
    let allowed = Command::new("unshare").args(["--mount", "true"]).status().is_ok_and(|status| status.success());
    if !allowed {
        return None;
    }
    let disk = bench.folder.path().join("disk");
    fs::create_dir(&disk).unwrap();
    let mut command = Command::new("unshare");
    let script = r#"mount -t tmpfs -o size=1m railtide-test "$1" && exec "$2" run --config "$3""#;
    command.args(["--mount", "sh", "-c", script, "sh"]);
    command.arg(&disk).arg(env!("CARGO_BIN_EXE_railtide")).arg(bench.config());
    let daemon = bench.start_with(command);
    let inside = PathBuf::from(format!("/proc/{}/root{}", daemon.pid(), disk.display()));
    Some((daemon, inside))
}

/// Writes until there's no room, to the last byte.
fn fill(folder: &std::path::Path) {
    let mut filler = fs::File::create(folder.join("filler")).unwrap();
    for size in [65_536, 4_096, 512, 1] {
        while filler.write_all(&vec![0; size]).is_ok() {}
    }
}

fn count(database: &std::path::Path, sql: &str) -> Option<i64> {
    let flags = rusqlite::OpenFlags::SQLITE_OPEN_READ_ONLY;
    let connection = rusqlite::Connection::open_with_flags(database, flags).ok()?;
    connection.query_row(sql, [], |row| row.get(0)).ok()
}

#[test]
fn with_the_disk_full_the_notice_goes_out_marked_and_everything_held_is_written_when_there_is_room() {
    let receiver = Phone::start();
    let mut line = Line::new();
    let bench = Bench::hall(&line.device(), &receiver.url());
    bench.change_config(r#"path = "hall.db""#, r#"path = "disk/hall.db""#);
    let Some((mut daemon, disk)) = start_on_small_disk(&bench) else {
        println!("skipped: no mount namespace is allowed here");
        return;
    };
    let database = disk.join("hall.db");
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
        (count(&database, "SELECT count(*) FROM open")? > 0).then_some(())
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
    assert_eq!(notice["alarm"], "rail-high:hall.reservoir");
    assert_eq!(notice["recorded"], false);
    assert!(notice["text"].as_str().unwrap().contains("not recorded"), "{notice}");
    assert!(daemon.is_running());

    fs::remove_file(disk.join("filler")).unwrap();
    wait_for("what was held is written", || {
        send(240_000, &mut sent);
        (count(&database, "SELECT count(*) FROM journal")? > 0).then_some(())
    });
    wait_for("every reading that was sent is in the record", || {
        (count(&database, "SELECT count(*) FROM open")? == sent).then_some(())
    });
    daemon.signal("TERM");
    wait_for("the daemon has committed and stopped", || {
        bench.log().lines().last()?.contains("stopped").then_some(())
    });
    assert_eq!(receiver.notices().len(), 1, "told once");
    assert!(bench.log().contains("the record can be written again"), "{}", bench.log());
}
