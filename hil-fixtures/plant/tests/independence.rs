//! The plant must not be built from the laws it is there to judge: it may depend on no other crate of the workspace.

use std::process::Command;

#[test]
fn depends_on_no_crate_of_the_workspace() {
    // All edges, tests and build scripts included; `--offline` because the graph is already resolved.
    let output = Command::new(env!("CARGO"))
        .args([
            "tree",
            "--offline",
            "--edges",
            "all",
            "--prefix",
            "none",
            "--format",
            "{p}",
            "--package",
            "offcurve-plant",
        ])
        .arg("--manifest-path")
        .arg(concat!(env!("CARGO_MANIFEST_DIR"), "/Cargo.toml"))
        .output()
        .expect("cargo runs this test, so it can be run");
    let tree = String::from_utf8_lossy(&output.stdout);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let names: Vec<&str> = tree.lines().filter_map(|line| line.split_whitespace().next()).collect();
    assert!(names.contains(&"offcurve-plant") && names.contains(&"libm"), "unexpected output: {tree}");
    let ours: Vec<&&str> =
        names.iter().filter(|name| name.starts_with("offcurve") && **name != "offcurve-plant").collect();
    assert!(ours.is_empty(), "the plant model depends on {ours:?}");
}
