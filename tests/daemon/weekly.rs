//! The weekly run: once, whatever restarts and clocks do, into a folder and to a webhook that may be down or redirect.

use std::fs;
use std::io::Write;
use std::net::{SocketAddr, TcpListener};
use std::path::Path;

use outwait::serve::{Config, PolicyFile, Webhook, read_token};

use crate::client::{get, post};
use crate::house::{House, NOON, courier, until};

const DAY: f64 = 86_400.0;
const POLICY: &str = "version: 1\nweekly: {day: monday, hour: 6, time_zone: Europe/Paris}\nstreams:\n  - match: '*'\n    \
                      aim: rate\n    pause: {gave_up: 2s}\n    now: 60s\n";

/// Changes a daemon's setting for weekly runs on this folder.
fn setting(folder: &Path, webhook: Option<SocketAddr>) -> impl FnOnce(&mut Config) {
    fs::write(folder.join("policy.yaml"), POLICY).unwrap();
    fs::write(folder.join("secret"), "correct-horse-battery").unwrap();
    #[cfg(unix)]
    fs::set_permissions(folder.join("secret"), std::os::unix::fs::PermissionsExt::from_mode(0o600)).unwrap();
    let (policy, secret, runs) = (folder.join("policy.yaml"), folder.join("secret"), folder.join("runs"));
    move |config| {
        config.policy = PolicyFile::at(policy);
        config.weekly.folder = Some(runs);
        config.weekly.webhook = webhook.map(|to| {
            let address = format!("http://{to}/hook").parse().unwrap();
            Webhook::new(address, read_token(&secret).unwrap(), None).unwrap()
        });
    }
}

fn runs(folder: &Path) -> Vec<String> {
    let names =
        fs::read_dir(folder.join("runs")).unwrap().map(|e| e.unwrap().file_name().into_string().unwrap());
    let mut names: Vec<String> =
        names.filter(|name| name.ends_with(".json") && !name.contains("state")).collect();
    names.sort();
    names
}

#[test]
fn once_a_week_over_restarts() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path();
    let data = path.join("data");
    let mut house = House::on(&data, setting(path, None)).unwrap();
    assert_eq!(post(house.address, courier("courier", 600).as_bytes()).status, 200);
    until("advice", || (get(house.address, "/v1/advice/courier").status == 200).then_some(()));
    until("a state", || fs::metadata(path.join("runs/weekly-state.json")).ok());
    assert!(runs(path).is_empty(), "it starts after this week's hour");
    // Monday, 7 December 2026, 06:00 in Paris is 05:00 UTC.
    let due = NOON + 7.0 * DAY - 7.0 * 3_600.0;
    house.set_clock(due - 1.0);
    std::thread::sleep(std::time::Duration::from_millis(1_200));
    assert!(runs(path).is_empty());
    house.set_clock(due + 1.0);
    until("the run", || (runs(path) == ["weekly-2026-12-07.json"]).then_some(()));
    let week: serde_json::Value =
        serde_json::from_slice(&fs::read(path.join("runs/weekly-2026-12-07.json")).unwrap()).unwrap();
    assert_eq!((&week["schema"], &week["due"]), (&"outwait/weekly/1".into(), &"2026-12-07".into()));
    assert!(week["since"].is_null());
    let html = fs::read_to_string(path.join("runs/weekly-2026-12-07.html")).unwrap();
    assert!(html.contains("<figure><div class=\"ow-wide\"><svg"), "the change to sign has its picture");
    for form in ["md", "html", "csv"] {
        assert!(path.join(format!("runs/weekly-2026-12-07.{form}")).exists());
    }
    // Removed, it is not made again: not while it runs, not after a restart.
    until("the state", || {
        fs::read_to_string(path.join("runs/weekly-state.json")).ok().filter(|s| s.contains("12-07"))
    });
    fs::remove_file(path.join("runs/weekly-2026-12-07.json")).unwrap();
    house.set_clock(due - 3_600.0);
    std::thread::sleep(std::time::Duration::from_millis(1_200));
    house.stop();
    let house = House::on(&data, setting(path, None)).unwrap();
    house.set_clock(due + 2.0 * DAY);
    std::thread::sleep(std::time::Duration::from_millis(1_200));
    assert!(runs(path).is_empty());
    // Away for three weeks: the newest, once.
    house.set_clock(due + 22.0 * DAY);
    until("the run", || (runs(path) == ["weekly-2026-12-28.json"]).then_some(()));
    // What changed is told against the set that the ledger has kept, although its file was removed.
    let week: serde_json::Value =
        serde_json::from_slice(&fs::read(path.join("runs/weekly-2026-12-28.json")).unwrap()).unwrap();
    assert_eq!(week["since"], "2026-12-07");
    // The set is kept after its files are written.
    until("the set to compare with", || {
        (get(house.address, "/v1/weekly").json()["since"] == "2026-12-28").then_some(())
    });
}

#[test]
fn a_webhook_that_is_down_is_told_later_and_a_redirect_is_not_followed() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path();
    let hook = TcpListener::bind("127.0.0.1:0").unwrap();
    let to = hook.local_addr().unwrap();
    let house = House::on(&path.join("data"), setting(path, Some(to))).unwrap();
    until("a state", || fs::metadata(path.join("runs/weekly-state.json")).ok());
    let answer = |status: &str| {
        let (mut stream, _) = hook.accept().unwrap();
        let mut request = Vec::new();
        let mut byte = [0];
        while !request.ends_with(b"\r\n\r\n") {
            std::io::Read::read_exact(&mut stream, &mut byte).unwrap();
            request.push(byte[0]);
        }
        let head = String::from_utf8(request).unwrap();
        let field = |name: &str| {
            let named = |line: &str| {
                line.split_once(": ").filter(|(n, _)| n.eq_ignore_ascii_case(name)).map(|(_, v)| v.to_owned())
            };
            head.lines().find_map(named).unwrap()
        };
        let mut body = vec![0; field("Content-Length").parse().unwrap()];
        std::io::Read::read_exact(&mut stream, &mut body).unwrap();
        write!(stream, "HTTP/1.1 {status}\r\nContent-Length: 0\r\nLocation: http://{to}/other\r\n\r\n")
            .unwrap();
        assert!(head.starts_with("POST /hook HTTP/1.1\r\n"), "{head}");
        let key = ring::hmac::Key::new(ring::hmac::HMAC_SHA256, b"correct-horse-battery");
        let signed = [field("Outwait-Time").as_bytes(), b".", &body].concat();
        let tag: String =
            ring::hmac::sign(&key, &signed).as_ref().iter().map(|b| format!("{b:02x}")).collect();
        assert_eq!(field("Outwait-Signature"), format!("sha256={tag}"));
        assert!(body.starts_with(b"{"));
        field("Outwait-Delivery")
    };
    house.set_clock(NOON + 7.0 * DAY);
    assert_eq!(answer("503 Service Unavailable"), "weekly-2026-12-07");
    let pending = || fs::read_to_string(path.join("runs/weekly-state.json")).unwrap();
    until("the next try", || pending().contains("\"tries\":1").then_some(()));
    house.set_clock(NOON + 7.0 * DAY + 11.0);
    assert_eq!(answer("204 No Content"), "weekly-2026-12-07");
    until("its end", || pending().contains("\"pending\":null").then_some(()));
    house.set_clock(NOON + 14.0 * DAY);
    assert_eq!(answer("307 Temporary Redirect"), "weekly-2026-12-14");
    until("its end", || pending().contains("\"pending\":null").then_some(()));
    hook.set_nonblocking(true).unwrap();
    house.set_clock(NOON + 15.0 * DAY);
    std::thread::sleep(std::time::Duration::from_millis(1_500));
    assert!(hook.accept().is_err(), "it was sent again");
}
