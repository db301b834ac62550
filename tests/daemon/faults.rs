//! What goes wrong around it.

use std::io::Write;
use std::net::TcpStream;
use std::os::unix::fs::PermissionsExt;
use std::path::Path;
use std::process::Command;
use std::time::{Duration, Instant};

use outwait::serve::ServeError;

use crate::client::{ask, get, post, read_answer, write_request};
use crate::house::{House, NOON, until};

fn line(stream: &str) -> Vec<u8> {
    format!("{{\"stream\":\"{stream}\",\"elapsed\":1.5}}\n").into_bytes()
}

/// A disk of its own of so many bytes; `None` where the system does not allow one.
struct SmallDisk<'a>(&'a Path);

impl<'a> SmallDisk<'a> {
    fn mount(at: &'a Path, bytes: u32) -> Option<SmallDisk<'a>> {
        let options = format!("size={bytes}");
        let mounted = Command::new("mount").args(["-t", "tmpfs", "-o", &options, "tmpfs"]).arg(at).output();
        mounted.is_ok_and(|output| output.status.success()).then_some(SmallDisk(at))
    }
}

impl Drop for SmallDisk<'_> {
    fn drop(&mut self) {
        let _ = Command::new("umount").arg("-l").arg(self.0).status();
    }
}

#[test]
fn a_full_disk_is_told_of_and_recovered_from() {
    let folder = tempfile::tempdir().unwrap();
    let Some(disk) = SmallDisk::mount(folder.path(), 3 << 20) else {
        println!("skipped: this system lets the test mount no small disk");
        return;
    };
    let mut house = House::on(folder.path(), |_| {}).unwrap();
    let body = |i: usize| -> Vec<u8> {
        (0..2_000)
            .map(|j| format!("{{\"stream\":\"s{}\",\"elapsed\":{}.{i}}}\n", j % 50, j + 1))
            .collect::<String>()
            .into_bytes()
    };
    let mut acknowledged = 0;
    let mut full = None;
    for i in 0..2_000 {
        let answer = post(house.address, &body(i));
        match answer.status {
            200 => acknowledged += 2_000,
            _ => {
                full = Some(answer);
                break;
            }
        }
    }
    let full = full.expect("3 MiB are soon full");
    assert_eq!(
        (full.status, &full.json()["type"]),
        (507, &"urn:outwait:problem:disk-full".into()),
        "{}",
        full.text()
    );
    assert_eq!(get(house.address, "/readyz").status, 503);
    assert!(get(house.address, "/v1/health").json()["ledger_trouble"].as_str().unwrap().contains("no room"));
    // What there is can still be asked for.
    assert_eq!(get(house.address, "/v1/advice").status, 200);
    // Room is made: it goes on by itself.
    let grown = Command::new("mount").args(["-o", "remount,size=64m"]).arg(folder.path()).status();
    assert!(grown.unwrap().success());
    until("it finds out by itself", || Some(()).filter(|()| get(house.address, "/readyz").status == 200));
    assert_eq!(post(house.address, &body(9_999)).status, 200);
    acknowledged += 2_000;
    house.stop();
    let shown = Command::new(env!("CARGO_BIN_EXE_outwait"))
        .args(["ledger", "show", "--format", "json", "--data"])
        .arg(folder.path())
        .output()
        .unwrap();
    let shown: serde_json::Value = serde_json::from_slice(&shown.stdout).unwrap();
    let counted: u64 =
        shown["streams"].as_array().unwrap().iter().map(|stream| stream["waits"].as_u64().unwrap()).sum();
    assert_eq!(counted, acknowledged);
    drop(disk);
}

#[test]
fn a_folder_that_may_not_be_written_is_named() {
    let folder = tempfile::tempdir().unwrap();
    let data = folder.path().join("data");
    std::fs::create_dir(&data).unwrap();
    // A file in place of the folder is refused whoever runs the test; a read-only folder only for those who are not root.
    let file = folder.path().join("file");
    std::fs::write(&file, "x").unwrap();
    assert!(matches!(House::on(&file, |_| {}).err(), Some(ServeError::Ledger(_))));
    // Root may write where the mode forbids it, but not on a disk that is mounted for reading.
    let root = Command::new("id").arg("-u").output().is_ok_and(|id| id.stdout.starts_with(b"0\n"));
    let disk = if root { SmallDisk::mount(&data, 3 << 20) } else { None };
    if root && disk.is_none() {
        println!("skipped in part: root may write everywhere, and may mount nothing here");
        return;
    }
    if disk.is_some() {
        let shut = Command::new("mount").args(["-o", "remount,ro"]).arg(&data).status().unwrap();
        assert!(shut.success());
    } else {
        std::fs::set_permissions(&data, std::fs::Permissions::from_mode(0o500)).unwrap();
    }
    let error = House::on(&data, |_| {}).err().unwrap().to_string();
    assert!(error.contains("may not be written"), "{error}");
}

/// A clock set wrong deletes nothing, and advice goes on.
#[test]
fn the_clock_jumps() {
    let house = House::new();
    assert_eq!(post(house.address, &line("a")).status, 200);
    for now in [NOON + 3.0e8, NOON - 3.0e8, 0.0, NOON + 10.0] {
        house.set_clock(now);
        assert_eq!(post(house.address, &line("a")).status, 200, "{now}");
        std::thread::sleep(Duration::from_millis(1_200));
        assert_eq!(get(house.address, "/readyz").status, 200);
    }
    let shown = |house: &House| {
        get(house.address, "/metrics")
            .text()
            .lines()
            .find(|l| l.starts_with("outwait_waits_total"))
            .unwrap()
            .to_owned()
    };
    assert_eq!(shown(&house), "outwait_waits_total 5");
    let advice = until("advice", || Some(get(house.address, "/v1/advice/a")).filter(|a| a.status == 200));
    assert!(advice.json()["age_s"].as_f64().unwrap() >= 0.0);
}

#[test]
fn a_damaged_ledger_is_named_and_the_rest_served() {
    let folder = tempfile::tempdir().unwrap();
    let mut house = House::on(folder.path(), |_| {}).unwrap();
    for i in 0..40 {
        let lines: Vec<u8> = (0..200)
            .flat_map(|j| format!("{{\"stream\":\"s{i}\",\"elapsed\":{}.25}}\n", j + 1).into_bytes())
            .collect();
        assert_eq!(post(house.address, &lines).status, 200);
    }
    house.stop();
    let file = folder.path().join("ledger.sqlite3");
    let sound = std::fs::read(&file).unwrap();
    let mut named = 0;
    for round in 0..12 {
        let mut bytes = sound.clone();
        match round % 2 {
            0 => {
                let at = 4_096 + (bytes.len() - 4_096) * round / 12;
                bytes[at..(at + 64).min(sound.len())].iter_mut().for_each(|byte| *byte ^= 0x5a);
            }
            _ => bytes.truncate(bytes.len() * (round + 1) / 14),
        }
        std::fs::write(&file, bytes).unwrap();
        let _ = std::fs::remove_file(folder.path().join("ledger.sqlite3-wal"));
        let _ = std::fs::remove_file(folder.path().join("ledger.sqlite3-shm"));
        let check = Command::new(env!("CARGO_BIN_EXE_outwait"))
            .args(["ledger", "check", "--data"])
            .arg(folder.path())
            .output()
            .unwrap();
        // Sound (the bytes were of no use), or named; never a panic.
        assert!([0, 3].contains(&check.status.code().unwrap()), "{check:?}");
        named += u32::from(check.status.code() == Some(3));
        match House::on(folder.path(), |_| {}) {
            Ok(house) => assert!(get(house.address, "/v1/advice").status == 200),
            Err(ServeError::Ledger(error)) => assert!(!error.remedy().is_empty()),
            Err(other) => panic!("{other}"),
        }
    }
    assert!(named >= 6, "{named}");
}

#[test]
fn a_thousand_slow_clients_do_not_keep_the_others() {
    let house = House::with(|config| config.limits.connections = 1_100);
    let slow: Vec<TcpStream> = (0..1_000)
        .filter_map(|_| {
            let mut stream = TcpStream::connect(house.address).ok()?;
            stream
                .write_all(
                    b"POST /v1/waits HTTP/1.1\r\nHost: test\r\nContent-Length: 1000\r\n\r\n{\"stream\"",
                )
                .ok()?;
            Some(stream)
        })
        .collect();
    assert!(slow.len() >= 900, "{} connections", slow.len());
    let began = Instant::now();
    for _ in 0..20 {
        assert_eq!(post(house.address, &line("a")).status, 200);
    }
    assert!(began.elapsed() < Duration::from_secs(20), "{:?}", began.elapsed());
    drop(slow);
}

#[test]
fn half_open_and_broken_connections_leave_nothing_behind() {
    let house = House::new();
    for i in 0..200 {
        let mut stream = TcpStream::connect(house.address).unwrap();
        match i % 4 {
            0 => {}
            1 => stream
                .write_all(b"POST /v1/waits HTTP/1.1\r\nHost: t\r\nContent-Length: 50\r\n\r\n{\"str")
                .unwrap(),
            2 => stream.write_all(&[0, 159, 146, 150, 13, 10, 13, 10]).unwrap(),
            _ => {
                write_request(&mut stream, "POST", "/v1/waits", &[], &line("a")).unwrap();
                // Gone before the answer.
            }
        }
    }
    until("all closed", || {
        get(house.address, "/metrics")
            .text()
            .lines()
            .any(|line| line == "outwait_connections 1")
            .then_some(())
    });
    assert_eq!(post(house.address, &line("a")).status, 200);
}

/// A hundred thousand names in a minute: the limit holds, and those within it are served.
/// What it takes to decode a table is up to whoever wrote it.
#[test]
fn a_table_in_columns_is_not_taken_over_http() {
    let house = House::new();
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/reference/columns");
    for name in ["waits-gzip.parquet", "waits.arrow", "waits.arrows"] {
        let table = std::fs::read(folder.join(name)).unwrap();
        // Of a kind that is to be found out by content.
        let kind = [("Content-Type", "application/octet-stream")];
        let answer = ask(house.address, "POST", "/v1/waits", &kind, &table);
        assert_eq!(answer.status, 400, "{name}");
        assert!(answer.text().contains("outwait weigh"), "{name}: {}", answer.text());
    }
}

#[test]
fn names_without_end() {
    let house = House::with(|config| {
        config.ledger.most_streams = 20_000;
        config.advice_share = 0.05;
    });
    let mut refused = 0;
    for lot in 0..100 {
        let body: String =
            (0..1_000).map(|i| format!("{{\"stream\":\"n.{lot}.{i}\",\"elapsed\":1.5}}\n")).collect();
        let answer = post(house.address, body.as_bytes());
        match answer.status {
            200 => {}
            507 => refused += 1,
            other => panic!("{other}: {}", answer.text()),
        }
    }
    assert_eq!(refused, 80);
    assert_eq!(post(house.address, &line("n.0.1")).status, 200);
    let metrics = until("the count", || {
        Some(get(house.address, "/metrics")).filter(|m| m.text().contains("outwait_ledger_streams 20000"))
    });
    assert!(metrics.body.len() < 8 << 20, "label values are bounded: {} bytes", metrics.body.len());
}

/// Requests pipelined on one connection are answered in order.
#[test]
fn one_connection_many_batches() {
    let house = House::new();
    let mut stream = TcpStream::connect(house.address).unwrap();
    let one = line("a");
    for i in 0..50 {
        let end = if i == 49 { "Connection: close\r\n" } else { "" };
        let head =
            format!("POST /v1/waits HTTP/1.1\r\nHost: t\r\n{end}Content-Length: {}\r\n\r\n", one.len());
        stream.write_all(head.as_bytes()).unwrap();
        stream.write_all(&one).unwrap();
    }
    let first = read_answer(&mut stream).unwrap();
    assert_eq!(first.status, 200);
    let text = String::from_utf8_lossy(&first.body).into_owned();
    assert_eq!(text.matches("HTTP/1.1 200").count(), 49, "and the first");
    let head = ask(house.address, "HEAD", "/v1/advice", &[], b"");
    assert_eq!((head.status, head.body.len()), (200, 0));
}
