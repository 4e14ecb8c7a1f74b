//! The demo as a person starts it, from the command line to its closing summary.

use offcurve_tests::running::{image, program};
use std::process::Command;

fn demo(arguments: &[&str]) -> String {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let output = Command::new(program())
        .args(["demo", "--dir"])
        .arg(folder.path())
        .args(arguments)
        .output()
        .expect("the program starts");
    let text = String::from_utf8_lossy(&output.stdout).into_owned();
    println!("{text}{}", String::from_utf8_lossy(&output.stderr));
    assert!(output.status.success(), "the demo ended with {}", output.status);
    text
}

#[test]
fn it_names_the_wear_of_well_pump_2_and_nothing_else() {
    let text = demo(&["--for", "70s"]);
    for part in
        ["1 s here is 1 min", "records received", "0 lost", "Alarms raised: 1.", "- Well pump 2: off-curve: Head is"]
    {
        assert!(text.contains(part), "no {part:?}");
    }
    assert!(text.contains("Likely cause: worn wear rings"), "the cause is named");
    assert!(!text.contains("- Well pump 1"), "the healthy pump has no alarm");
}

#[test]
fn the_emulated_controller_gives_the_same_alarm() {
    let image = image();
    let text = demo(&["--for", "110s", "--controller", "emulated", "--image", &image.to_string_lossy()]);
    assert!(text.contains("on the emulated board"), "it says what runs");
    assert!(text.contains("Alarms raised: 1."), "one alarm");
    assert!(text.contains("Likely cause: worn wear rings"), "the cause is named");
}
