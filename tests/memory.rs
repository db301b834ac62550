//! Ten thousand streams of a thousand waits each, over a week, stay under 512 MiB. Alone in its process, since
//! it reads the process's own high-water mark.

use outwait::tally::Book;
use outwait::wait::{Ending, Wait};

#[test]
fn ten_thousand_streams_of_a_thousand_waits() {
    let names: Vec<String> = (0..10_000).map(|i| format!("branch-{i}.lookup")).collect();
    let mut book = Book::default();
    for j in 0..1_000u64 {
        for (i, name) in (0u64..).zip(&names) {
            // Distinct ages (the dearest case), one in eight cut off, seven days.
            let age = ((i * 7_919 + j * 104_729) % 1_000_003 + 1) as f64 * 1e-6;
            let ending = if j % 8 == 0 { Ending::GaveUp } else { Ending::Done };
            let wait = Wait::new(age, ending).unwrap().with_at(86_400.0 * (j / 143) as f64).unwrap();
            book.add(name, &wait).unwrap();
        }
    }
    let total: u64 = book.streams().iter().map(|(_, d)| d.whole().counts().iter().sum::<u64>()).sum();
    assert_eq!(total, 10_000_000);
    let Ok(status) = std::fs::read_to_string("/proc/self/status") else {
        println!("skipped: this system does not tell a process its memory");
        return;
    };
    let line = status.lines().find(|l| l.starts_with("VmHWM")).unwrap();
    let kib: f64 = line.split_whitespace().nth(1).unwrap().parse().unwrap();
    println!("high-water mark: {:.0} MiB", kib / 1024.0);
    assert!(kib < 512.0 * 1024.0, "{:.0} MiB", kib / 1024.0);
}
