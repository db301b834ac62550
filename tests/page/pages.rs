//! What each page says, and what none may do.

use std::io::{Read, Write};
use std::net::TcpStream;

use outwait::serve::PolicyFile;

use crate::client::{Answer, ask, get, post};
use crate::house::{House, NOON, courier, until};

const POLICY: &str = "\
version: 1
streams:
  - match: \"courier*\"
    kind: request
    aim: rate
    worth: {done: 1.0, failed: 0.0, gave_up: 0.0}
    pause: {done: 0s, failed: 2s, gave_up: 2s}
    now: 60s
    guard: {floor: 100ms, ceiling: 10m, evidence: 300, window: 14d, slack: 1%}
";

const BROWSER: [(&str, &str); 1] = [("Accept", "text/html,application/xhtml+xml,*/*;q=0.8")];

fn look(house: &House, path: &str) -> Answer {
    ask(house.address, "GET", path, &BROWSER, b"")
}

fn with_policy() -> House {
    let file = tempfile::tempdir().unwrap().keep().join("policy.yaml");
    std::fs::write(&file, POLICY).unwrap();
    House::with(|config| config.policy = PolicyFile::at(&file))
}

fn advised(house: &House, stream: &str, waits: u32) {
    assert_eq!(post(house.address, courier(stream, waits).as_bytes()).status, 200);
    until("advice", || {
        Some(()).filter(|()| get(house.address, &format!("/v1/advice/{stream}")).status == 200)
    });
}

/// What holds of every page: HTML that the policy keeps shut, without anything inline.
fn shut(page: &Answer) -> String {
    assert!(page.header("content-type").unwrap().starts_with("text/html"), "{page:?}");
    let policy = page.header("content-security-policy").unwrap();
    for rule in [
        "default-src 'none'",
        "script-src 'self'",
        "style-src 'self'",
        "frame-ancestors 'none'",
        "form-action 'self'",
    ] {
        assert!(policy.contains(rule), "{policy}");
    }
    assert!(!policy.contains("unsafe"));
    assert_eq!(page.header("x-content-type-options"), Some("nosniff"));
    let html = page.text().to_owned();
    assert!(html.starts_with("<!doctype html>") && html.trim_end().ends_with("</html>"));
    for inline in [" style=", "<style", " onclick", " onload", "javascript:"] {
        assert!(!html.contains(inline), "{inline}");
    }
    let scripts: Vec<&str> = html.match_indices("<script").map(|(at, _)| &html[at..at + 40]).collect();
    assert_eq!(scripts, ["<script src=\"/page/page.js\" defer></script>"[..40].to_owned()]);
    // Names of XML are no addresses; nothing else names another host.
    let plain = html.replace("http://www.w3.org/2000/svg", "");
    for (at, _) in plain.match_indices("//") {
        let before = &plain[..at];
        assert!(
            !before.ends_with("src=\"") && !before.ends_with("href=\"") && !before.ends_with("action=\"")
        );
    }
    html
}

#[test]
fn an_empty_house_tells_what_to_do_first() {
    let house = House::new();
    let streams = shut(&look(&house, "/"));
    assert!(
        streams.contains("Nothing has come so far") && streams.contains("http:&#x2f;&#x2f;test/v1"),
        "{streams}"
    );
    assert!(shut(&look(&house, "/open")).contains("Nobody is known to wait"));
    let health = shut(&look(&house, "/how-it-is"));
    assert!(health.contains("nothing has come since the start") && health.contains("--policy FILE"));
}

/// Half over before 20 s, half at exactly 90 s, 2 s pause: give up at 20 s (see the daemon's tests).
#[test]
fn one_stream_from_finding_to_evidence() {
    let house = with_policy();
    advised(&house, "courier/city:north", 2_000);
    let list = shut(&look(&house, "/"));
    assert!(list.contains("given up at the wrong time") && list.contains("worth a day"), "{list}");
    assert!(list.contains("href=\"&#x2f;stream&#x2f;courier&#x2f;city:north\""));
    assert_eq!(list.matches("class=\"lane\"").count(), 2);
    let stream = shut(&look(&house, "/stream/courier/city:north"));
    assert!(stream.contains("not after 60.0 s: that loses"), "{stream}");
    // Four pictures, each for two widths, with its words and its numbers.
    assert_eq!(stream.matches("class=\"ow\"").count(), 8);
    assert_eq!(stream.matches("<details>").count(), 5);
    for word in ["advised", "in force", "never", "Families of laws", "What to mind", "Retries among them"] {
        assert!(stream.contains(word), "{word}");
    }
    // Ids are not used twice.
    let mut ids: Vec<&str> =
        stream.split(" id=\"").skip(1).map(|rest| rest.split('"').next().unwrap()).collect();
    let count = ids.len();
    ids.sort_unstable();
    ids.dedup();
    assert_eq!(ids.len(), count);
}

#[test]
fn a_time_is_tried_without_a_script() {
    let house = with_policy();
    advised(&house, "courier.slot", 2_000);
    let tried = look(&house, "/stream/courier.slot?give_up_after=45s");
    assert_eq!(tried.status, 200);
    let html = shut(&tried);
    assert!(
        html.contains("value=\"45s\"") && html.contains("<th scope=\"row\">asked about</th><td>45.0 s</td>"),
        "{html}"
    );
    // The page and the interface say the same.
    let data = get(house.address, "/v1/streams/courier.slot/whatif?give_up_after=45s").json();
    let done = outwait::say::percent(data["asked"]["done_share"].as_f64().unwrap());
    assert!(html.contains(&format!("<td>{done}</td>")), "{done}");
    let wrong = look(&house, "/stream/courier.slot?give_up_after=soon");
    assert_eq!(wrong.status, 400);
    assert!(shut(&wrong).contains("aria-invalid") && wrong.text().contains("write 800ms"));
    let never = shut(&look(&house, "/stream/courier.slot?give_up_after=never"));
    assert!(never.contains("<th scope=\"row\">asked about</th><td>never</td>"));
    // A second question is answered from what the first has worked out.
    let began = std::time::Instant::now();
    get(house.address, "/v1/streams/courier.slot/whatif?give_up_after=46s");
    println!("a second what-if took {:.1} ms", began.elapsed().as_secs_f64() * 1e3);
}

#[test]
fn thin_streams_and_streams_without_a_price_have_their_page() {
    let house = House::new();
    advised(&house, "desk.loan", 4);
    let page = shut(&look(&house, "/stream/desk.loan"));
    assert!(page.contains("Gather evidence") && !page.contains("Try it<"), "{page}");
    assert!(shut(&look(&house, "/")).contains("There is no policy"));
}

#[test]
fn open_waits_and_their_events() {
    let house = with_policy();
    advised(&house, "courier.slot", 2_000);
    for (id, age) in [("young", 5.0), ("old", 50.0), ("older", 500.0)] {
        let started = NOON - age;
        let line = format!("{{\"stream\":\"courier.slot\",\"id\":\"{id}\",\"started\":{started}}}\n");
        assert_eq!(post(house.address, line.as_bytes()).status, 200);
    }
    let page = shut(&look(&house, "/open"));
    let place = |id: &str| page.find(&format!("<th scope=\"row\">{id}</th>")).unwrap();
    assert!(place("older") < place("old") && place("old") < place("young"), "{page}");
    assert!(page.contains("2 of 3 open waits: let go of them now") && page.contains("lost so far"));
    // The first event holds the same rows. It ends when the house does, not when the client goes.
    let mut stream = TcpStream::connect(house.address).unwrap();
    stream.set_read_timeout(Some(std::time::Duration::from_secs(60))).unwrap();
    stream.write_all(b"GET /open/live HTTP/1.1\r\nHost: test\r\n\r\n").unwrap();
    let mut seen = String::new();
    let mut part = [0; 4_096];
    while !seen.contains("young") {
        let count = stream.read(&mut part).unwrap();
        assert!(count > 0, "{seen}");
        seen += &String::from_utf8_lossy(&part[..count]);
    }
    assert!(
        seen.contains("text/event-stream") && seen.contains("data: <p class=\"finding\">2 of 3"),
        "{seen}"
    );
    let mut house = house;
    let began = std::time::Instant::now();
    house.stop();
    println!("stopped with a listener in {:.2} s", began.elapsed().as_secs_f64());
    let mut rest = Vec::new();
    let _ = stream.read_to_end(&mut rest);
}

#[test]
fn bad_lines_are_shown_with_an_example() {
    let house = House::new();
    post(
        house.address,
        b"{\"stream\":\"desk.loan\",\"elapsed\":1}\n{\"stream\":\"<b>x\",\"elapsed\":1}\nnonsense<i>\n",
    );
    let page = shut(&look(&house, "/how-it-is"));
    assert!(page.contains("not JSON") && page.contains("line 3"), "{page}");
    assert!(!page.contains("<b>") && !page.contains("<i>"));
}

#[test]
fn errors_help_whoever_asks() {
    let house = House::new();
    for (path, status) in [
        ("/stream/nobody", 404),
        ("/%3Cscript%3Ealert(1)%3C/script%3E", 404),
        ("/?page=0", 400),
        ("/?name=a%20b", 400),
        ("/?verdict=heavy", 400),
        ("/?color=red", 400),
        ("/page/none.css", 404),
        ("/v1/advice/%3Cb%3E", 404),
        ("/sign-out", 405),
    ] {
        let page = look(&house, path);
        assert_eq!(page.status, status, "{path}");
        let html = shut(&page);
        assert!(
            html.contains("What to do:") && !html.contains("<script>") && !html.contains("<b>"),
            "{html}"
        );
        let data = get(house.address, path);
        assert_eq!(data.header("content-type"), Some("application/problem+json"), "{path}");
        assert_eq!(data.status, status);
    }
}

#[test]
fn assets_are_fetched_once() {
    let house = House::new();
    for (file, kind) in
        [("page.css", "text/css"), ("page.js", "text/javascript"), ("icon.svg", "image/svg+xml")]
    {
        let path = format!("/page/{file}");
        let first = get(house.address, &path);
        assert!(first.header("content-type").unwrap().starts_with(kind));
        let tag = first.header("etag").unwrap();
        let again = ask(house.address, "GET", &path, &[("If-None-Match", tag)], b"");
        assert_eq!((again.status, again.body.len()), (304, 0));
    }
    let sheet = get(house.address, "/page/page.css");
    assert!(sheet.text().contains(".ow-advised{") && !sheet.text().contains("url("));
}
