//! Logs that are followed: each line is counted once, over rotations of every kind, restarts and kills.

use std::fs::{self, File, OpenOptions};
use std::io::{Read, Write};
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

use outwait::intake::{Mapping, Options, Pattern};
use outwait::serve::Followed;
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

use crate::client::get;
use crate::house::{House, until};
use crate::kills::{age, counted};
use crate::process::Process;

/// A log that is written to and rotated, a line a wait of its own age.
struct Log {
    path: PathBuf,
    file: File,
    next: u64,
}

impl Log {
    fn new(folder: &Path) -> Log {
        let path = folder.join("waits.log");
        Log { file: append(&path), path, next: 0 }
    }

    fn write(&mut self, lines: u64) {
        let mut text = String::new();
        for _ in 0..lines {
            text += &line(self.next);
            self.next += 1;
        }
        self.file.write_all(text.as_bytes()).unwrap();
    }

    fn old(&self, number: u32) -> PathBuf {
        self.path.with_extension(format!("log.{number}"))
    }

    /// Makes room for a new `.1`.
    fn shift(&self) {
        for number in (1..400).rev() {
            let next = self.old(number + 1);
            let _ = fs::rename(self.old(number), &next);
            let _ = fs::rename(gz(&self.old(number)), gz(&next));
        }
    }

    fn rename(&mut self) {
        self.shift();
        fs::rename(&self.path, self.old(1)).unwrap();
        self.file = append(&self.path);
    }

    fn copy_and_truncate(&mut self) {
        self.shift();
        fs::copy(&self.path, self.old(1)).unwrap();
        self.file.set_len(0).unwrap();
    }

    fn pack(&self, number: u32) {
        let mut bytes = Vec::new();
        File::open(self.old(number)).unwrap().read_to_end(&mut bytes).unwrap();
        let mut packed = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
        packed.write_all(&bytes).unwrap();
        let part = self.path.with_extension("part");
        fs::write(&part, packed.finish().unwrap()).unwrap();
        fs::rename(part, gz(&self.old(number))).unwrap();
        fs::remove_file(self.old(number)).unwrap();
    }
}

fn gz(path: &Path) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(".gz");
    name.into()
}

fn append(path: &Path) -> File {
    OpenOptions::new().append(true).create(true).open(path).unwrap()
}

fn line(number: u64) -> String {
    format!("{{\"stream\":\"stream-{}\",\"elapsed\":{}}}\n", number / 1_000, age(number))
}

/// A daemon that follows a log, on a folder of its own.
fn following(data: &Path, log: &Path, options: Options) -> House {
    let followed = Followed { path: log.to_owned(), options };
    House::on(data, |config| config.follow = vec![followed]).unwrap()
}

fn metric(house: &House, name: &str) -> u64 {
    let metrics = get(house.address, "/metrics");
    let line = metrics.text().lines().find_map(|line| line.strip_prefix(name)?.strip_prefix(' '));
    line.map_or(0, |value| value.parse::<f64>().unwrap() as u64)
}

fn taken(house: &House, waits: u64) {
    until(&format!("wait {waits}"), || (metric(house, "outwait_waits_total") >= waits).then_some(()));
}

/// Every wait up to `written` is there once.
fn once(data: &Path, written: u64) {
    let counted = counted(data);
    let wrong: Vec<_> = (0..written)
        .map(|number| (number, counted.get(&number).copied().unwrap_or(0)))
        .filter(|(_, times)| *times != 1)
        .collect();
    assert!(
        wrong.is_empty(),
        "of {written} waits {} were not counted once: {:?}",
        wrong.len(),
        &wrong[..wrong.len().min(20)]
    );
    assert_eq!(counted.len() as u64, written);
}

#[test]
fn a_log_is_counted_as_it_grows_and_a_part_of_a_line_waits_for_its_end() {
    let (folder, data) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let path = folder.path().join("waits.log");
    // It is waited for until it is there.
    let mut house = following(data.path(), &path, Options::default());
    let mut log = Log::new(folder.path());
    log.write(500);
    taken(&house, 500);
    let part = line(500);
    log.file.write_all(&part.as_bytes()[..20]).unwrap();
    std::thread::sleep(Duration::from_millis(500));
    assert_eq!(metric(&house, "outwait_waits_total"), 500);
    log.file.write_all(&part.as_bytes()[20..]).unwrap();
    log.next += 1;
    taken(&house, 501);
    house.stop();
    // Written while nobody watches.
    log.write(99);
    let house = following(data.path(), &path, Options::default());
    taken(&house, 99);
    drop(house);
    once(data.path(), 600);
}

/// The policy names logs: they are followed as long as it does, and go on where they were left when it does again.
#[test]
fn a_policy_names_logs() {
    let (folder, data) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let file = folder.path().join("policy.yaml");
    let mut log = Log::new(folder.path());
    let other = folder.path().join("access.log");
    let base = "version: 1\nstreams: [{match: '*', aim: rate, pause: {gave_up: 1s}}]\n";
    let name = |entries: &[String]| {
        let text = format!("{base}follow: [{}]\n", entries.join(", "));
        // Whole at once: the daemon may look at any moment.
        fs::write(file.with_extension("new"), text).unwrap();
        fs::rename(file.with_extension("new"), &file).unwrap();
    };
    let waits = format!("{{file: '{}'}}", log.path.display());
    let access = format!(
        "{{file: '{}', pattern: '^(?<stream>\\S+) (?<ending>\\d+) (?<elapsed_ms>\\d+)$', ending_of: '5??=failed,*=done'}}",
        other.display()
    );
    name(std::slice::from_ref(&waits));
    let policy = outwait::serve::PolicyFile::at(&file);
    let house = House::on(data.path(), |config| config.policy = policy).unwrap();
    log.write(100);
    taken(&house, 100);
    // Another in its place, with a form of its own.
    name(std::slice::from_ref(&access));
    fs::write(&other, "desk.north 200 9000000\ndesk.north 503 8000000\n").unwrap();
    taken(&house, 102);
    until("the first to be left", || {
        log.write(1);
        let before = metric(&house, "outwait_waits_total");
        std::thread::sleep(Duration::from_millis(600));
        (metric(&house, "outwait_waits_total") == before).then_some(())
    });
    // Both: the first goes on from its place, and by another name it is not followed twice.
    let alias = folder.path().join("alias.log");
    std::os::unix::fs::symlink(&log.path, &alias).unwrap();
    name(&[waits, format!("{{file: '{}'}}", alias.display()), access]);
    taken(&house, 2 + log.next);
    log.write(50);
    taken(&house, 2 + log.next);
    std::thread::sleep(Duration::from_millis(600));
    drop(house);
    let counted = counted(data.path());
    assert!((0..log.next).all(|number| counted.get(&number) == Some(&1)), "{counted:?}");
}

#[test]
fn rotations_of_every_kind_lose_nothing() {
    let (folder, data) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let mut log = Log::new(folder.path());
    let mut house = following(data.path(), &log.path, Options::default());
    log.write(10);
    taken(&house, 10);
    // Renamed; a writer that holds the old file writes to it once more, and its last line has no newline.
    log.write(10);
    let mut old = log.file.try_clone().unwrap();
    log.rename();
    let late = line(log.next);
    log.next += 1;
    old.write_all(late.trim_end().as_bytes()).unwrap();
    log.write(10);
    taken(&house, 31);
    // Copied and cut down, with lines that nobody has read yet.
    log.write(10);
    log.copy_and_truncate();
    log.write(40);
    taken(&house, 81);
    // Moved away, and there again after a while.
    let away = folder.path().join("waits.log.20261130");
    fs::rename(&log.path, away).unwrap();
    std::thread::sleep(Duration::from_millis(300));
    log.write(5);
    taken(&house, 86);
    log.file = append(&log.path);
    log.write(5);
    taken(&house, 91);
    house.stop();
    once(data.path(), 91);
}

#[test]
fn what_was_rotated_and_packed_while_it_was_down_is_read_in_order() {
    let (folder, data) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let mut log = Log::new(folder.path());
    log.write(20);
    let mut house = following(data.path(), &log.path, Options::default());
    taken(&house, 20);
    house.stop();
    log.write(20);
    log.rename();
    log.write(20);
    log.rename();
    log.pack(2);
    log.write(20);
    log.copy_and_truncate();
    log.pack(2);
    log.write(20);
    let mut house = following(data.path(), &log.path, Options::default());
    taken(&house, 80);
    house.stop();
    once(data.path(), 100);
    // And once more nothing.
    let mut house = following(data.path(), &log.path, Options::default());
    log.write(1);
    taken(&house, 1);
    house.stop();
    once(data.path(), 101);
}

#[test]
fn a_header_serves_every_part_and_a_bad_line_is_told_by_its_number() {
    let (folder, data) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let path = folder.path().join("waits.csv");
    let mut file = append(&path);
    file.write_all(b"stream,elapsed_ms,note\nstream-0,1,\"two\nlines\"\nstream-0,2,\"open").unwrap();
    let house = following(data.path(), &path, Options::default());
    taken(&house, 1);
    file.write_all(b"\nstill\"\nstream-0,three,\n").unwrap();
    taken(&house, 2);
    drop(house);
    file.write_all(b"stream-0,4,\nstream-0,-5,\n").unwrap();
    let house = following(data.path(), &path, Options::default());
    taken(&house, 1);
    let metrics = get(house.address, "/metrics");
    assert!(
        metrics.text().contains("outwait_bad_lines_total{field=\"elapsed\",reason=\"negative\"} 1"),
        "{}",
        metrics.text()
    );
    let health = get(house.address, "/v1/health").json();
    let examples = health["bad_examples"].as_array().unwrap();
    assert!(
        examples.iter().any(|bad| bad["line"] == 8 && bad["file"] == path.to_str().unwrap()),
        "{examples:?}"
    );
    drop(house);
    let counted = counted(data.path());
    assert_eq!((counted.get(&0), counted.get(&1), counted.get(&3)), (Some(&1), Some(&1), Some(&1)));
}

#[test]
fn access_logs_are_followed_by_a_pattern_and_lines_without_end_are_refused() {
    let (folder, data) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let path = folder.path().join("access.log");
    let pattern = Pattern::new(r#"^(?<stream>\S+) (?<ending>\d{3}) (?<elapsed_ms>\d+)$"#).unwrap();
    let mapping = Mapping::default().with_endings("5??=failed,*=done").unwrap();
    let options =
        Options { pattern: Some(pattern.into()), mapping: Some(mapping.into()), ..Options::default() };
    let mut file = append(&path);
    file.write_all(b"stream-0 200 1\nstream-0 503 2\n").unwrap();
    let house = following(data.path(), &path, options);
    taken(&house, 2);
    file.write_all(&vec![b'x'; 3_000_000]).unwrap();
    file.write_all(b"\nstream-0 200 3\n").unwrap();
    taken(&house, 3);
    let metrics = get(house.address, "/metrics");
    assert!(
        metrics.text().contains("outwait_bad_lines_total{field=\"line\",reason=\"too long\"} 1"),
        "{}",
        metrics.text()
    );
    drop(house);
    assert_eq!(counted(data.path()).len(), 3);
}

/// `OUTWAIT_KILLS=50 cargo test --release --test daemon followed -- --nocapture` for a long run.
#[test]
fn killed_at_any_moment_a_followed_log_is_counted_once() {
    let kills: u32 = std::env::var("OUTWAIT_KILLS").map_or(4, |kills| kills.parse().unwrap());
    let (folder, data) = (tempfile::tempdir().unwrap(), tempfile::tempdir().unwrap());
    let mut log = Log::new(folder.path());
    let path = log.path.to_str().unwrap().to_owned();
    // What was rotated before it was followed for the first time is not its business.
    log.write(10);
    let mut house = following(data.path(), Path::new(&path), Options::default());
    taken(&house, 10);
    house.stop();
    let over = AtomicBool::new(false);
    let written = std::thread::scope(|scope| {
        let writer = scope.spawn(|| {
            let mut random = Xoshiro256PlusPlus::seed_from_u64(29);
            while !over.load(Ordering::SeqCst) {
                log.write(random.random_range(1..40));
                match random.random_range(0..60) {
                    0 => log.rename(),
                    1 => log.copy_and_truncate(),
                    2 if log.old(2).exists() => log.pack(2),
                    _ => {}
                }
                // Names of rotated files go far enough for what is down for a while.
                std::thread::sleep(Duration::from_millis(20));
            }
            log.next
        });
        let mut random = Xoshiro256PlusPlus::seed_from_u64(31);
        for _ in 0..kills {
            let process = Process::with(data.path(), &["--follow", &path]);
            std::thread::sleep(Duration::from_millis(random.random_range(50..900)));
            process.kill();
        }
        over.store(true, Ordering::SeqCst);
        writer.join().unwrap()
    });
    let mut house = following(data.path(), Path::new(&path), Options::default());
    let mut seen = u64::MAX;
    until("the end of the log", || {
        std::thread::sleep(Duration::from_secs(3));
        let now = metric(&house, "outwait_lines_total");
        let same = now == seen;
        seen = now;
        same.then_some(())
    });
    house.stop();
    println!("{kills} kills, {written} lines");
    once(data.path(), written);
}
