//! The scorer against figures recorded from an independent one; `fixtures/score/WHY.md` says how
//! they were made.

use std::path::Path;

use asterskein::audit::score::score_folders;
use serde_json::Value;

const TOLERANCE: f64 = 1e-9;

/// Leaves of a nested value with their places.
fn leaves(value: &Value, place: String, out: &mut Vec<(String, Value)>) {
    match value {
        Value::Object(map) => {
            for (key, inner) in map {
                leaves(inner, format!("{place}.{key}"), out);
            }
        }
        Value::Array(list) => {
            for (k, inner) in list.iter().enumerate() {
                leaves(inner, format!("{place}[{k}]"), out);
            }
        }
        leaf => out.push((place, leaf.clone())),
    }
}

fn same(a: &Value, b: &Value) -> bool {
    match (a.as_f64(), b.as_f64()) {
        (Some(x), Some(y)) => (x - y).abs() <= TOLERANCE * y.abs().max(1.0),
        _ => a == b,
    }
}

fn compare(result: &str, loose_frames: bool, expected: &str) {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("fixtures/score");
    let truth = folder.join("campaign/truth");
    let score = score_folders(&truth, &folder.join(result), loose_frames).unwrap();
    let ours = serde_json::to_value(&score).unwrap();
    let text = std::fs::read_to_string(folder.join(expected)).unwrap();
    let theirs: Value = serde_json::from_str(&text).unwrap();
    let (mut a, mut b) = (Vec::new(), Vec::new());
    leaves(&ours, String::new(), &mut a);
    leaves(&theirs, String::new(), &mut b);
    let places = |v: &[(String, Value)]| v.iter().map(|l| l.0.clone()).collect::<Vec<_>>();
    assert_eq!(places(&a), places(&b));
    assert!(a.len() > 60, "only {} figures", a.len());
    for ((place, x), (_, y)) in a.iter().zip(&b) {
        assert!(same(x, y), "{place}: {x} here, {y} recorded");
    }
}

#[test]
fn plain_csv() {
    compare("result-csv", false, "expected.json");
}

#[test]
fn ecsv_with_frames_solved_for() {
    compare("result-ecsv", true, "expected-loose.json");
}
