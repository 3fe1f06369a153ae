//! Conditions in plant files: what is read, refused and warned of.

use super::{STATION, plant};
use counterpoise::pipeline::{Compiled, assess, tell_apart};
use counterpoise::plant::{Condition, Fault, Faults, Format, Signal, Test, read};

fn findings(text: &str) -> Vec<Fault> {
    match read(text, Format::Toml) {
        Ok(file) => file.warnings,
        Err(Faults(faults)) => faults,
    }
}

/// The station with one text for another.
fn with(old: &str, new: &str) -> String {
    assert!(STATION.contains(old), "{old}");
    STATION.replacen(old, new, 1)
}

#[test]
fn conditions_are_read_in_the_unit_of_the_tag() {
    let plant = plant(&with(r#"above = "2 t/h""#, r#"above = "1 kg/s""#));
    let past = plant.streams.iter().find(|s| s.name == "past").expect("it");
    let place = plant.tags.iter().position(|t| t.name == "F-P").expect("it");
    let condition = past.in_service_when.as_ref().expect("a condition");
    assert_eq!(condition.signal, Signal::Tag(place));
    let Test::Above(least) = condition.test else {
        panic!("{condition:?}")
    };
    assert!((least - 3.6).abs() < 1e-12, "{least} t/h");
    let pump = plant
        .equipment
        .iter()
        .find(|e| e.name == "pump-b")
        .expect("it");
    let of_two = Condition {
        signal: Signal::Status(2),
        test: Test::OneOf(vec![1.0, 2.0]),
    };
    assert_eq!(pump.in_service_when, Some(of_two.clone()));
    assert!(of_two.holds(2.0) && of_two.holds(1.0) && !of_two.holds(0.0) && !of_two.holds(3.0));
    assert_eq!(plant.statuses[1].normal, Some(1.0));
    assert!(plant.tags.iter().all(|tag| !tag.name.starts_with("XS")));
}

#[test]
fn every_fault_of_a_condition_is_told_with_its_place() {
    let cases: &[(&str, &str, &str, &str)] = &[
        (
            r#"tag = "XS-A", is = 1 } }
pump-b"#,
            r#"tag = "XS-AA", is = 1 } }
pump-b"#,
            "/equipment/pump-a/in-service-when/tag",
            "did you mean `XS-A`?",
        ),
        (
            r#"is = [1, 2]"#,
            r#"is = []"#,
            "/equipment/pump-b/in-service-when/is",
            "list",
        ),
        (
            r#"is = [1, 2]"#,
            r#"is = [1, "two"]"#,
            "/equipment/pump-b/in-service-when/is/1",
            "write 1",
        ),
        (
            r#"is = [1, 2]"#,
            r#"above = "1 t/h""#,
            "/equipment/pump-b/in-service-when/above",
            "is = 1",
        ),
        (
            r#"above = "2 t/h""#,
            r#"above = "2 bar""#,
            "/streams/past/in-service-when/above",
            "t/h",
        ),
        (
            r#"above = "2 t/h""#,
            r#"above = 2"#,
            "/streams/past/in-service-when/above",
            "2",
        ),
        (
            r#"above = "2 t/h""#,
            r#"is = 0"#,
            "/streams/past/in-service-when/is",
            "above",
        ),
        (
            r#"above = "2 t/h""#,
            r#"above = "2 t/h", below = "3 t/h""#,
            "/streams/past/in-service-when/below",
            "one test",
        ),
        (
            r#", above = "2 t/h""#,
            "",
            "/streams/past/in-service-when",
            "one test",
        ),
        (
            r#"above = "2 t/h""#,
            r#"over = "2 t/h""#,
            "/streams/past/in-service-when/over",
            "",
        ),
        (
            r#"tag = "XS-0", is = 1"#,
            r#"is = 1"#,
            "/running-when",
            "tag",
        ),
        (
            r#"XS-0 = { measures = "status" }"#,
            r#"XS-0 = { measures = "status", unit = "t/h" }"#,
            "/tags/XS-0/unit",
            "remove",
        ),
        (
            r#"XS-0 = { measures = "status" }"#,
            r#"XS-0 = { measures = "statu" }"#,
            "/tags/XS-0/measures",
            "`status`",
        ),
    ];
    for (old, new, path, mend) in cases {
        let faults = findings(&with(old, new));
        let found = faults.iter().find(|fault| fault.path == *path);
        let found = found.unwrap_or_else(|| panic!("{new}: {faults:#?}"));
        assert!(found.line.is_some(), "{found:?}");
        let all = format!("{} {}", found.what, found.mend);
        assert!(all.contains(mend), "{new}: {all}");
    }
    // All at once.
    let many = with(r#"is = [1, 2]"#, "is = []").replacen(r#"above = "2 t/h""#, "is = 0", 1);
    let errors = findings(&many);
    assert!(errors.len() >= 2, "{errors:?}");
}

#[test]
fn what_goes_with_a_part_is_warned_of() {
    let cooler = r#"cooler   = { kind = "exchanger", in-service-when = { tag = "XS-A", is = 1 } }"#;
    let quiet = findings(&with(r#"cooler   = { kind = "exchanger" }"#, cooler));
    let about = |faults: &[Fault]| -> Vec<String> {
        let about = faults.iter().filter(|f| f.what.contains("out of service"));
        about.map(|f| format!("{}: {}", f.path, f.what)).collect()
    };
    assert!(about(&quiet).is_empty(), "{quiet:?}");
    let cold = with(
        r#"cold   = { fluid = "water", from = "cooler.hot", to = "mixer" }"#,
        r#"cold   = { fluid = "water", from = "cooler.hot", to = "mixer", in-service-when = { tag = "XS-A", is = 1 } }"#,
    );
    let told = about(&findings(&cold));
    assert_eq!(told.len(), 1, "{told:?}");
    assert!(told[0].contains("/streams/cold/in-service-when") && told[0].contains("`cooler`"));
}

#[test]
fn the_assessment_is_of_normal_operation() {
    let compiled = Compiled::new(plant(STATION), 1);
    let assessment = assess(&compiled);
    let line_up = assessment.line_up.expect("told");
    assert_eq!(line_up.name, "without pump-b");
    assert!(assessment.operating_point.contains("without pump-b"));
    assert_eq!(assessment.tags.len(), compiled.plant().tags.len());
    assert!(!assessment.streams.contains_key("b-out"));
    assert!(assessment.streams.contains_key("a"));
    let told = tell_apart(&compiled, None);
    assert!(told.operating_point.contains("without pump-b"));
    let about_b = told.rows.iter().flat_map(|row| &row.causes);
    assert!(
        about_b
            .into_iter()
            .all(|limit| limit.hypothesis.of != "pump-b")
    );
    assert_eq!(compiled.compilations(), 1);
}
