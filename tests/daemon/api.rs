//! What it takes and what it answers.

use std::io::Write;

use crate::client::{ask, get, post};
use crate::house::{House, NOON, courier, until};

const POLICY: &str = "\
version: 1
streams:
  - match: \"courier.*\"
    kind: request
    aim: rate
    worth: {done: 1.0, failed: 0.0, gave_up: 0.0}
    pause: {done: 0s, failed: 2s, gave_up: 2s}
    now: 60s
    guard: {floor: 100ms, ceiling: 10m, evidence: 300, window: 14d, slack: 1%}
";

fn with_policy() -> (House, std::path::PathBuf) {
    let folder = tempfile::tempdir().unwrap().keep();
    let file = folder.join("policy.yaml");
    std::fs::write(&file, POLICY).unwrap();
    let house = House::with(|config| config.policy = outwait::serve::PolicyFile::at(&file));
    (house, file)
}

/// Common practice, no source: half over before 20 s, half at exactly 90 s, 2 s pause: give up at 20 s.
#[test]
fn waits_in_advice_out() {
    let (house, _) = with_policy();
    let receipt = post(house.address, courier("courier.slot", 2_000).as_bytes());
    assert_eq!(receipt.status, 200, "{}", receipt.text());
    let receipt = receipt.json();
    assert_eq!((&receipt["waits"], &receipt["bad_lines"]), (&2_000.into(), &0.into()));
    let advice =
        until("advice", || Some(get(house.address, "/v1/advice/courier.slot")).filter(|a| a.status == 200));
    let json = advice.json();
    let give_up = json["advice"]["give_up_after_s"].as_f64().unwrap();
    assert!((19.0..23.0).contains(&give_up), "{give_up}");
    assert_eq!(json["evidence"]["waits"], 2_000);
    assert!(json["age_s"].as_f64().unwrap() >= 0.0);
    // The same tag, nothing to say.
    let tag = advice.header("etag").unwrap();
    let again = ask(house.address, "GET", "/v1/advice/courier.slot", &[("If-None-Match", tag)], b"");
    assert_eq!((again.status, again.body.len()), (304, 0));
    let all = get(house.address, "/v1/advice");
    assert_eq!(all.json()["streams"][0]["stream"], "courier.slot");
    assert_eq!(all.json()["schema"], "outwait/advice/1");
    let none = get(house.address, "/v1/advice?stream=desk.*").json();
    assert_eq!(none["streams"].as_array().unwrap().len(), 0);
    let since = get(house.address, &format!("/v1/advice?since={}", NOON + 1.0)).json();
    assert_eq!(since["streams"].as_array().unwrap().len(), 0);
}

#[test]
fn curves_pictures_and_what_if() {
    let (house, _) = with_policy();
    post(house.address, courier("courier/city:north", 2_000).as_bytes());
    post(house.address, courier("courier.slot", 2_000).as_bytes());
    until("advice", || Some(()).filter(|()| get(house.address, "/v1/advice/courier.slot").status == 200));
    // A name with slashes and colons is a path of its own.
    until("advice", || {
        Some(()).filter(|()| get(house.address, "/v1/advice/courier/city:north").status == 200)
    });
    let curve = get(house.address, "/v1/streams/courier/city:north/curve").json();
    let points = curve["points"].as_array().unwrap();
    // Uniform on (0, 20) for half of them: a quarter is over by 10 s.
    let at_10 =
        points.iter().min_by_key(|p| ((p["age_s"].as_f64().unwrap() - 10.0).abs() * 1e6) as u64).unwrap();
    assert!((at_10["survival"].as_f64().unwrap() - 0.75).abs() < 0.03, "{at_10}");
    let what = get(house.address, "/v1/streams/courier.slot/whatif?give_up_after=60s").json();
    // Half done by 60 s: rate = 0.5 / (0.5 * 10 + 0.5 * 62), by hand.
    let rate = what["asked"]["rate_per_s"].as_f64().unwrap();
    assert!((rate - 0.5 / (0.5 * 10.0 + 0.5 * 62.0)).abs() < 5e-4, "{rate}");
    assert_eq!(what["asked"]["give_up_after_s"], what["now"]["give_up_after_s"]);
    for picture in ["waiting", "remaining", "rate", "holding"] {
        let svg =
            get(house.address, &format!("/v1/streams/courier.slot/curve.svg?picture={picture}&width=480"));
        assert_eq!((svg.status, svg.header("content-type")), (200, Some("image/svg+xml")));
        let document = roxmltree::Document::parse(svg.text()).unwrap();
        assert_eq!(document.root_element().tag_name().name(), "svg");
    }
    for (path, status) in [
        ("/v1/streams/courier.slot/whatif", 400),
        ("/v1/streams/courier.slot/whatif?give_up_after=soon", 400),
        ("/v1/streams/courier.slot/whatif?give_up_after=-1", 400),
        ("/v1/streams/courier.slot/whatif?giveup=2s", 400),
        ("/v1/streams/courier.slot/weather", 404),
        ("/v1/streams/nobody/curve", 404),
        ("/v1/streams/courier.slot/curve.svg?width=9", 400),
        ("/v1/streams/courier.slot/curve.svg?picture=cat", 400),
        ("/v1/advice/nobody", 404),
        ("/v1/advice?since=yesterday", 400),
        ("/v1/open?most=0", 400),
        ("/nowhere", 404),
    ] {
        let answer = get(house.address, path);
        assert_eq!(
            (answer.status, answer.header("content-type")),
            (status, Some("application/problem+json")),
            "{path}"
        );
        let problem = answer.json();
        assert_eq!(problem["status"], status);
        assert!(!problem["remedy"].as_str().unwrap().is_empty() && problem["type"].is_string(), "{problem}");
        assert!(answer.header("x-request-id").is_some());
    }
}

#[test]
fn csv_gzip_and_zstd() {
    let house = House::new();
    let csv = "stream,elapsed,ending\ndesk.loan,1.5,done\ndesk.loan,2.5,failed\n";
    let answer = ask(house.address, "POST", "/v1/waits", &[("Content-Type", "text/csv")], csv.as_bytes());
    assert_eq!((answer.status, &answer.json()["waits"]), (200, &2.into()));
    let mut gzip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    gzip.write_all(csv.as_bytes()).unwrap();
    let packed = [("Content-Encoding", "gzip"), ("Content-Type", "text/csv")];
    let answer = ask(house.address, "POST", "/v1/waits", &packed, &gzip.finish().unwrap());
    assert_eq!((answer.status, &answer.json()["waits"]), (200, &2.into()));
    let zstd = zstd::encode_all(csv.as_bytes(), 1).unwrap();
    let answer = ask(house.address, "POST", "/v1/waits", &[("Content-Encoding", "zstd")], &zstd);
    assert_eq!((answer.status, &answer.json()["waits"]), (200, &2.into()));
    // Each batch that was acknowledged is there.
    let seen = until("advice", || {
        Some(get(house.address, "/v1/advice/desk.loan")).filter(|a| a.json()["evidence"]["waits"] == 6)
    });
    assert_eq!(seen.json()["evidence"]["failed"], 3);
}

#[test]
fn a_repeated_key_counts_once_also_after_a_restart() {
    let folder = tempfile::tempdir().unwrap();
    let mut house = House::on(folder.path(), |_| {}).unwrap();
    let line = br#"{"stream":"desk.loan","elapsed":1.5}"#;
    let send = |house: &House, key: &str, body: &[u8]| {
        ask(house.address, "POST", "/v1/waits", &[("Idempotency-Key", key)], body)
    };
    assert_eq!(send(&house, "monday", line).json()["repeated"], false);
    assert_eq!(send(&house, "monday", line).json()["repeated"], true);
    house.stop();
    let house = House::on(folder.path(), |_| {}).unwrap();
    assert_eq!(send(&house, "monday", line).json()["repeated"], true);
    let other = send(&house, "monday", br#"{"stream":"desk.loan","elapsed":9}"#);
    assert_eq!((other.status, &other.json()["type"]), (422, &"urn:outwait:problem:key-reused".into()));
    assert_eq!(send(&house, "", line).status, 400);
    // Without a key nothing is guessed.
    assert_eq!(post(house.address, line).json()["repeated"], false);
    let advice = until("advice", || {
        Some(get(house.address, "/v1/advice/desk.loan"))
            .filter(|a| a.status == 200 && a.json()["evidence"]["waits"] == 2)
    });
    assert_eq!(advice.json()["advice"]["action"], "gather_evidence");
}

#[test]
fn bad_lines_are_counted_told_of_and_the_rest_is_read() {
    let house = House::new();
    let body =
        "{\"stream\":\"desk.loan\",\"elapsed\":1.5}\nnonsense\n{\"stream\":\"desk.loan\",\"elapsed\":-1}\n";
    let answer = post(house.address, body.as_bytes()).json();
    assert_eq!((&answer["waits"], &answer["bad_lines"]), (&1.into(), &2.into()));
    assert_eq!(
        (&answer["bad_examples"][0]["line"], &answer["bad_examples"][1]["field"]),
        (&2.into(), &"elapsed".into())
    );
    let only_bad = post(house.address, b"nonsense\n");
    assert_eq!((only_bad.status, &only_bad.json()["bad_examples"][0]["line"]), (400, &1.into()));
    for empty in [&b""[..], b"\n\n"] {
        assert_eq!(post(house.address, empty).status, 400);
    }
    let health = get(house.address, "/v1/health").json();
    assert!(!health["bad_examples"].as_array().unwrap().is_empty());
    let metrics = get(house.address, "/metrics");
    assert!(metrics.text().contains("outwait_bad_lines_total{field=\"elapsed\""), "{}", metrics.text());
}

#[test]
fn starts_are_open_until_their_end() {
    let house = House::new();
    let starts = format!(
        "{{\"stream\":\"lender.reply\",\"id\":\"a\",\"started\":{}}}\n{{\"stream\":\"lender.reply\",\"id\":\"b\",\"started\":{}}}\n\
         {{\"stream\":\"lender.reply\",\"id\":\"c\",\"elapsed\":60,\"ending\":\"waiting\",\"at\":{NOON}}}\n",
        NOON - 100.0,
        NOON - 50.0
    );
    let receipt = post(house.address, starts.as_bytes()).json();
    assert_eq!((&receipt["waits"], &receipt["events"]), (&1.into(), &3.into()));
    let open = get(house.address, "/v1/open").json();
    assert_eq!(open["total"], 3);
    assert_eq!(open["waits"].as_array().unwrap().len(), 3);
    // One ends by its end, one by a whole record under its id.
    let ends = format!(
        "{{\"stream\":\"lender.reply\",\"id\":\"a\",\"ended\":{NOON},\"ending\":\"done\"}}\n\
         {{\"stream\":\"lender.reply\",\"id\":\"c\",\"elapsed\":70,\"at\":{}}}\n",
        NOON + 10.0
    );
    house.set_clock(NOON + 20.0);
    assert_eq!(post(house.address, ends.as_bytes()).json()["joined"], 1);
    let open = get(house.address, "/v1/open?stream=lender.reply").json();
    assert_eq!(
        (&open["total"], &open["waits"][0]["id"], &open["waits"][0]["age_s"]),
        (&1.into(), &"b".into(), &70.0.into())
    );
    assert_eq!(open["waits"][0]["verdict"], "unknown");
    let advice = until("advice", || {
        Some(get(house.address, "/v1/advice/lender.reply"))
            .filter(|a| a.status == 200 && a.json()["evidence"]["done"] == 2)
    });
    // What is open is evidence too: it has waited so long and is not over.
    assert_eq!(advice.json()["evidence"]["waiting"], 1);
}

#[test]
fn open_waits_past_the_advice_are_to_be_let_go() {
    let (house, _) = with_policy();
    post(house.address, courier("courier.slot", 2_000).as_bytes());
    until("advice", || Some(()).filter(|()| get(house.address, "/v1/advice/courier.slot").status == 200));
    let starts = [("old", 50.0), ("young", 5.0)].map(|(id, age)| {
        format!("{{\"stream\":\"courier.slot\",\"id\":\"{id}\",\"started\":{}}}\n", NOON - age)
    });
    post(house.address, starts.concat().as_bytes());
    let open = get(house.address, "/v1/open").json();
    let verdicts: Vec<(&str, &str)> = open["waits"]
        .as_array()
        .unwrap()
        .iter()
        .map(|wait| (wait["id"].as_str().unwrap(), wait["verdict"].as_str().unwrap()))
        .collect();
    assert_eq!(verdicts, [("old", "let_go"), ("young", "hold")]);
    assert!(open["waits"][1]["holding_on"].as_f64().unwrap() > 0.0);
    assert!(open["waits"][1]["look_again"].is_string());
}

#[test]
fn a_changed_policy_is_taken_and_a_bad_one_refused() {
    let (house, file) = with_policy();
    post(house.address, courier("courier.slot", 2_000).as_bytes());
    let action = || {
        let answer = get(house.address, "/v1/advice/courier.slot");
        (answer.status == 200).then(|| answer.json()["advice"]["action"].as_str().unwrap().to_owned())
    };
    until("advice", || action().filter(|a| a == "give_up_after"));
    std::fs::write(&file, POLICY.replace("evidence: 300", "evidence: 100000")).unwrap();
    until("advice under the new policy", || action().filter(|a| a == "gather_evidence"));
    std::fs::write(&file, POLICY.replace("aim: rate", "aim: rat")).unwrap();
    let refused = until("a refusal", || {
        get(house.address, "/v1/health").json()["policy_refused"].as_str().map(str::to_owned)
    });
    assert!(refused.contains("rat"), "{refused}");
    assert!(get(house.address, "/metrics").text().contains("outwait_policy_sound 0"));
    assert_eq!(action().as_deref(), Some("gather_evidence"));
    // It vanishes: the last sound one stays.
    std::fs::remove_file(&file).unwrap();
    until("a refusal", || {
        get(house.address, "/v1/health").json()["policy_refused"]
            .as_str()
            .filter(|why| why.contains("cannot read"))
            .map(drop)
    });
    assert_eq!((action().as_deref(), get(house.address, "/readyz").status), (Some("gather_evidence"), 200));
    std::fs::write(&file, POLICY).unwrap();
    until("the policy again", || action().filter(|a| a == "give_up_after"));
    assert!(get(house.address, "/v1/health").json()["policy_refused"].is_null());
}
