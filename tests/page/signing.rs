//! Signing in, and what other sites cannot make a browser do.

use outwait::serve::read_token;

use crate::client::{Answer, ask, get};
use crate::house::House;

const SECRET: &str = "4dd65e0c-not-guessed";
const HTML: (&str, &str) = ("Accept", "text/html");
const LINE: &[u8] = br#"{"stream":"desk.loan","elapsed":1.5}"#;

fn guarded() -> House {
    let file = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(file.path(), SECRET).unwrap();
    let token = read_token(file.path()).unwrap();
    House::with(|config| config.token = Some(token))
}

fn show(house: &House, token: &str, next: &str, more: &[(&str, &str)]) -> Answer {
    let mut headers = vec![("Content-Type", "application/x-www-form-urlencoded"), HTML];
    headers.extend(more);
    ask(house.address, "POST", "/sign-in", &headers, format!("token={token}&next={next}").as_bytes())
}

#[test]
fn one_signs_in_and_out() {
    let house = guarded();
    let door = ask(house.address, "GET", "/stream/a?give_up_after=2s", &[HTML], b"");
    assert_eq!((door.status, door.header("www-authenticate").is_some()), (401, true));
    assert!(door.text().contains("type=\"password\""));
    assert!(door.text().contains("value=\"&#x2f;stream&#x2f;a?give_up_after=2s\""), "{}", door.text());
    assert_eq!(
        (get(house.address, "/page/page.css").status, get(house.address, "/sign-in").status),
        (200, 200)
    );
    let wrong = show(&house, "4dd65e0c-not-guessee", "/", &[]);
    assert_eq!((wrong.status, wrong.header("set-cookie")), (403, None));
    assert!(wrong.text().contains("That is not the token"));
    let signed = show(&house, SECRET, "%2Fopen", &[]);
    assert_eq!((signed.status, signed.header("location")), (303, Some("/open")));
    let cookie = signed.header("set-cookie").unwrap();
    for part in ["HttpOnly", "SameSite=Strict", "Path=/", "Max-Age=43200"] {
        assert!(cookie.contains(part), "{cookie}");
    }
    assert!(!cookie.contains(SECRET));
    let cookie = cookie.split(';').next().unwrap().to_owned();
    let with = |path: &str, cookie: &str| ask(house.address, "GET", path, &[("Cookie", cookie)], b"").status;
    for path in ["/", "/week", "/open", "/how-it-is", "/v1/advice", "/metrics"] {
        assert_eq!(
            (with(path, &cookie), with(path, "outwait="), with(path, "a=b")),
            (200, 401, 401),
            "{path}"
        );
    }
    assert_eq!(with("/", &format!("a=b; {cookie}")), 200);
    // Elsewhere is not gone to.
    assert_eq!(show(&house, SECRET, "%2F%2Felsewhere", &[]).header("location"), Some("/"));
    let own = ("Sec-Fetch-Site", "same-origin");
    let out = ask(house.address, "POST", "/sign-out", &[("Cookie", &cookie), own], b"");
    assert_eq!((out.status, with("/", &cookie)), (303, 401));
}

#[test]
fn other_sites_change_nothing() {
    let house = guarded();
    let signed = show(&house, SECRET, "/", &[]);
    let cookie = signed.header("set-cookie").unwrap().split(';').next().unwrap().to_owned();
    let send = |headers: &[(&str, &str)]| ask(house.address, "POST", "/v1/waits", headers, LINE).status;
    let cookie = ("Cookie", cookie.as_str());
    // Only where the browser says that the page was ours.
    assert_eq!(send(&[cookie]), 403);
    for foreign in [
        ("Sec-Fetch-Site", "cross-site"),
        ("Sec-Fetch-Site", "same-site"),
        ("Origin", "null"),
        ("Origin", "http://elsewhere"),
        ("Origin", "http://test.elsewhere"),
    ] {
        assert_eq!(send(&[cookie, foreign]), 403, "{foreign:?}");
        assert_eq!(show(&house, SECRET, "/", &[foreign]).status, 403, "{foreign:?}");
    }
    assert_eq!(send(&[cookie, ("Sec-Fetch-Site", "same-origin")]), 200);
    assert_eq!(send(&[cookie, ("Origin", "http://test")]), 200);
    assert_eq!(send(&[("Authorization", &format!("Bearer {SECRET}"))]), 200);
    // Without a token too: a page elsewhere could reach a daemon on the reader's own machine.
    let open = House::new();
    let to = |headers: &[(&str, &str)]| ask(open.address, "POST", "/v1/waits", headers, LINE).status;
    assert_eq!((to(&[]), to(&[("Origin", "http://test")])), (200, 200));
    assert_eq!((to(&[("Origin", "http://elsewhere")]), to(&[("Sec-Fetch-Site", "cross-site")])), (403, 403));
    assert_eq!(get(open.address, "/sign-in").status, 303);
}
