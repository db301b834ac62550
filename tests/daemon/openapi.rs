//! The description of the interface is true of the handlers: OpenAPI 3.1 (spec.openapis.org/oas/v3.1.0).

use outwait::serve::Signing;
use serde_json::Value;

use crate::client::{ask, get, post};
use crate::house::{House, courier, until};

fn described() -> Value {
    serde_json::from_str(outwait::serve::OPENAPI).unwrap()
}

/// Follows `$ref`.
fn resolve<'a>(document: &'a Value, schema: &'a Value) -> &'a Value {
    match schema["$ref"].as_str() {
        Some(reference) => {
            document.pointer(reference.trim_start_matches('#')).unwrap_or_else(|| panic!("{reference}"))
        }
        None => schema,
    }
}

/// What of JSON Schema the description uses: type, const, enum, required, properties, items.
fn check(document: &Value, schema: &Value, value: &Value, at: &str) {
    let schema = resolve(document, schema);
    if let Some(expected) = schema.get("const") {
        assert_eq!(value, expected, "{at}");
    }
    if let Some(allowed) = schema["enum"].as_array() {
        assert!(allowed.contains(value), "{at}: {value}");
    }
    let name = |value: &Value| match value {
        Value::Null => "null",
        Value::Bool(_) => "boolean",
        Value::Number(n) if n.is_u64() || n.is_i64() => "integer",
        Value::Number(_) => "number",
        Value::String(_) => "string",
        Value::Array(_) => "array",
        Value::Object(_) => "object",
    };
    let types: Vec<&str> = match &schema["type"] {
        Value::String(one) => vec![one],
        Value::Array(some) => some.iter().map(|t| t.as_str().unwrap()).collect(),
        _ => vec![],
    };
    let found = name(value);
    assert!(
        types.is_empty() || types.contains(&found) || (found == "integer" && types.contains(&"number")),
        "{at}: {found} is none of {types:?}"
    );
    for needed in schema["required"].as_array().into_iter().flatten() {
        assert!(value.get(needed.as_str().unwrap()).is_some(), "{at} lacks {needed}");
    }
    for (property, schema) in schema["properties"].as_object().into_iter().flatten() {
        if let Some(value) = value.get(property) {
            check(document, schema, value, &format!("{at}.{property}"));
        }
    }
    if let (Some(items), Some(values)) = (schema.get("items"), value.as_array()) {
        values.iter().for_each(|value| check(document, items, value, &format!("{at}[]")));
    }
}

#[test]
fn every_described_path_answers_as_described() {
    let house = House::with(|config| config.signing = Signing::Anyone);
    post(house.address, courier("courier.slot", 2_000).as_bytes());
    post(house.address, b"{\"stream\":\"courier.slot\",\"id\":\"a\",\"started\":1796039990}\n");
    until("advice", || Some(()).filter(|()| get(house.address, "/v1/advice/courier.slot").status == 200));
    let document = described();
    assert_eq!(document["openapi"], "3.1.0");
    for (path, operations) in document["paths"].as_object().unwrap() {
        for (method, operation) in operations.as_object().unwrap() {
            // A body of the description's own, else a wait.
            let example =
                operation.pointer("/requestBody/content/application~1json/example").map(Value::to_string);
            let body = example.as_deref().unwrap_or(r#"{"stream":"desk.loan","elapsed":1.5}"#).as_bytes();
            let (method, body): (_, &[u8]) = match method.as_str() {
                "get" => ("GET", b""),
                "post" => ("POST", body),
                other => panic!("{other}"),
            };
            let mut target = path.replace("{stream}", "courier.slot");
            for parameter in operation["parameters"].as_array().into_iter().flatten() {
                if parameter["in"] == "query" && parameter["required"] == true {
                    target += &format!("?{}=20s", parameter["name"].as_str().unwrap());
                }
            }
            if path == "/open/live" {
                // It has no end: tests/page reads its first event.
                let wrong = get(house.address, "/open/live?nonsense=1");
                assert_eq!(wrong.status, 400);
                continue;
            }
            // Requests of OTLP have a form of their own, and so have their errors.
            let telemetry = matches!(path.as_str(), "/v1/traces" | "/v1/metrics");
            let (headers, body): (&[(&str, &str)], &[u8]) =
                if telemetry { (&[("Content-Type", "application/json")], b"{}") } else { (&[], body) };
            let answer = ask(house.address, method, &target, headers, body);
            assert_eq!(answer.status, 200, "{target}: {}", answer.text());
            let content = operation["responses"]["200"]["content"].as_object().unwrap();
            let kind = answer.header("content-type").unwrap().split(';').next().unwrap();
            let schema = content.get(kind).unwrap_or_else(|| panic!("{target} answers {kind}"));
            if kind == "application/json" {
                check(&document, &schema["schema"], &answer.json(), &target);
            }
            // Its problems too.
            let wrong = ask(
                house.address,
                method,
                &format!("{target}{}nonsense=1", if target.contains('?') { '&' } else { '?' }),
                headers,
                body,
            );
            if wrong.status >= 400 {
                let problem =
                    &document["components"]["schemas"][if telemetry { "RpcStatus" } else { "Problem" }];
                check(&document, problem, &wrong.json(), &target);
                assert!(
                    operation["responses"][wrong.status.to_string()].is_object(),
                    "{target} {}",
                    wrong.status
                );
            }
        }
    }
    // Every reference leads somewhere.
    fn references<'a>(value: &'a Value, found: &mut Vec<&'a str>) {
        match value {
            Value::Object(map) => {
                map.iter().for_each(|(name, value)| match (name.as_str(), value.as_str()) {
                    ("$ref", Some(reference)) => found.push(reference),
                    _ => references(value, found),
                })
            }
            Value::Array(list) => list.iter().for_each(|value| references(value, found)),
            _ => {}
        }
    }
    let mut found = Vec::new();
    references(&document, &mut found);
    assert!(found.len() > 20);
    for reference in found {
        assert!(document.pointer(reference.trim_start_matches('#')).is_some(), "{reference}");
    }
}

#[test]
fn what_is_served_is_described() {
    let house = House::new();
    let served = get(house.address, "/v1/openapi.json");
    assert_eq!(served.json(), described());
    // A path that is not described is not there: what there is beside, the handlers' own list says in tests/daemon/api.rs.
    for path in ["/v2/waits", "/v1", "/v1/streams", "/metrics/x", "/healthz/"] {
        assert_eq!(get(house.address, path).status, 404, "{path}");
    }
}
