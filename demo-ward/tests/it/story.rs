//! The story is whole: every file can be made, and what it promises of its cast is there.

use ebbmark_demo_ward::story::{Act, Story};
use std::collections::BTreeSet;

#[test]
fn story_is_told_in_order_over_three_days_and_at_least_ten_beds() {
    let story = Story::load().unwrap();
    assert!(story.people.len() >= 10);
    let beds: BTreeSet<&str> = story.people.iter().map(|person| &*person.bed).collect();
    assert_eq!(beds.len(), story.people.len(), "one bed, one person");
    assert!((story.ends - story.begins).num_days() >= 3);
    assert!(story.steps.is_sorted_by_key(|step| step.at));
    assert!(story.steps.iter().all(|step| (story.begins..=story.ends).contains(&step.at)));
}

#[test]
fn every_file_has_its_own_name_without_a_patient_in_it_and_can_be_made() {
    let story = Story::load().unwrap();
    let mut names = BTreeSet::new();
    for step in &story.steps {
        let Act::Export(export) = &step.act else { continue };
        assert!(names.insert(&*export.name), "{} twice", export.name);
        for person in &story.people {
            assert!(!export.name.contains(person.id.expose()), "{}", export.name);
        }
        let bytes = export.bytes().unwrap();
        assert!(bytes.len() > 100, "{}", export.name);
        assert_eq!(bytes, export.bytes().unwrap(), "the same each time: {}", export.name);
    }
    assert!(names.len() > 40);
}
