//! The plant's verdict, and statuses.

use super::*;
use crate::plant::Status;

/// A plant with 20 tags named T00 to T19 like A, and the status Z.
fn many() -> Plant {
    let mut plant = plant();
    let tag = plant.tags[0].clone();
    plant.tags = (0..20)
        .map(|i| Tag {
            name: format!("T{i:02}"),
            ..tag.clone()
        })
        .collect();
    plant.statuses = vec![Status {
        name: "Z".to_owned(),
        normal: None,
    }];
    plant
}

/// The steadiness with some tags on a ramp, and the samples of Z.
fn verdict(plant: &Plant, ramps: &[usize], z: &[Sample]) -> Option<Steadiness> {
    let lists: Vec<Vec<Sample>> = (0..20)
        .map(|i| {
            let slope = if ramps.contains(&i) { 0.5 } else { 0.0 };
            let values: Vec<f64> = (0..30)
                .map(|k| 100.0 + slope * f64::from(k) + [0.0, 0.3, -0.3][k as usize % 3])
                .collect();
            every(10.0, &values)
        })
        .collect();
    let names: Vec<String> = plant.tags.iter().map(|tag| tag.name.clone()).collect();
    let mut map: HashMap<&str, &[Sample]> = names
        .iter()
        .zip(&lists)
        .map(|(name, list)| (name.as_str(), list.as_slice()))
        .collect();
    map.insert("Z", z);
    batch(plant, START, START + Duration::minutes(5), "b", &map).steadiness
}

#[test]
fn some_of_the_key_tags_may_move() {
    let plant = many();
    let steady = verdict(&plant, &[3, 7], &[]).unwrap();
    assert_eq!((steady.steady, steady.judged), (true, 20));
    assert_eq!(steady.unsteady, ["T03", "T07"]);
    assert!(!verdict(&plant, &[3, 7, 9], &[]).unwrap().steady);
}

#[test]
fn only_key_tags_count() {
    let mut plant = many();
    plant.averaging.key_tags = vec![0, 1, 2];
    let steady = verdict(&plant, &[3, 7, 9, 11], &[]).unwrap();
    assert_eq!(
        (steady.steady, steady.judged, steady.unsteady.len()),
        (true, 3, 0)
    );
    assert!(!verdict(&plant, &[2], &[]).unwrap().steady);
}

#[test]
fn a_status_that_changes_makes_the_batch_unsteady() {
    let plant = many();
    let held = samples(&[(-86_400.0, 1.0)]);
    let steady = verdict(&plant, &[], &held).unwrap();
    assert_eq!((steady.steady, steady.judged), (true, 21));
    let changed = samples(&[(-86_400.0, 1.0), (120.0, 0.0)]);
    let steady = verdict(&plant, &[], &changed).unwrap();
    assert_eq!(
        (steady.steady, steady.unsteady),
        (false, vec!["Z".to_owned()])
    );
    // Repeated, or changed at the very start, or after the end.
    for z in [
        [(-10.0, 1.0), (120.0, 1.0)],
        [(-10.0, 1.0), (0.0, 0.0)],
        [(-10.0, 1.0), (300.0, 0.0)],
    ] {
        assert!(verdict(&plant, &[], &samples(&z)).unwrap().steady, "{z:?}");
    }
}

#[test]
fn a_status_is_its_last_good_value() {
    let plant = many();
    let read = |list: &[Sample]| {
        let map = HashMap::from([("Z", list)]);
        let batch = batch(&plant, START, START + Duration::minutes(5), "b", &map);
        assert!(batch.steadiness.is_none_or(|steadiness| !steadiness.steady));
        batch.readings[0].clone()
    };
    let mut list = samples(&[(-10.0, 1.0), (100.0, 0.0), (200.0, 1.0)]);
    list[2].quality.grade = Grade::Bad;
    let reading = read(&list);
    assert_eq!(reading.value, Some(0.0));
    assert_eq!(reading.averaged.unwrap().flags, [(Flag::Bad, 1)]);
    let reading = read(&list[2..]);
    assert_eq!((reading.value, reading.quality.grade), (None, Grade::Bad));
}

#[test]
fn where_nothing_is_judged_nothing_is_said() {
    let plant = many();
    assert_eq!(
        batch(
            &plant,
            START,
            START + Duration::minutes(5),
            "b",
            &HashMap::new()
        )
        .steadiness,
        None
    );
}

#[test]
fn a_jump_of_which_few_samples_tell_is_not_judged() {
    let list = samples(&[(-10.0, 100.0), (100.0, 120.0), (200.0, 121.0)]);
    assert_eq!(made(usual(), &list).steady, None);
    // Exceptions that hardly move are steady, and so is a signal that has none.
    let list = samples(&[(-10.0, 100.0), (100.0, 100.2), (200.0, 100.1)]);
    assert_eq!(made(usual(), &list).steady, Some(true));
    assert_eq!(made(usual(), &list[..1]).steady, Some(true));
}
