//! Plant files, and what `offcurve check` says of good and bad ones.

use offcurve::config::{self, AnyFile, PlantConfig};
use std::{
    fs,
    path::{Path, PathBuf},
    process::Command,
};

fn demo(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("demo").join(name)
}

/// A folder with two machine files and a plant file.
fn folder(plant: &str) -> tempfile::TempDir {
    let folder = tempfile::tempdir().unwrap();
    for name in ["well-pump-1.toml", "well-pump-2.toml"] {
        fs::copy(demo(name), folder.path().join(name)).unwrap();
    }
    fs::write(folder.path().join("plant.toml"), plant).unwrap();
    folder
}

const PLANT: &str = r#"name = "Waterworks"
store = "data/waterworks.db"

[[controller]]
name = "North"
port = "/dev/ttyUSB0"
machine = "well-pump-1.toml"

[[controller]]
name = "South"
port = "/dev/ttyUSB1"
baud = "9600 Bd"
machine = "well-pump-2.toml"
"#;

fn error_of(plant: &str) -> String {
    let folder = folder(plant);
    let error = PlantConfig::load(&folder.path().join("plant.toml")).expect_err(plant).to_string();
    error.replace(&format!("{}/", folder.path().display()), "")
}

#[test]
fn a_good_plant_loads_with_its_machines() {
    let folder = folder(PLANT);
    let plant = PlantConfig::load(&folder.path().join("plant.toml")).unwrap();
    assert_eq!(plant.name, "Waterworks");
    assert_eq!(plant.store, folder.path().join("data/waterworks.db"));
    let controllers: Vec<_> = plant
        .controllers
        .iter()
        .map(|c| (c.name.as_str(), c.port.as_path(), c.baud, c.machine.profile.machine))
        .collect();
    assert_eq!(
        controllers,
        [("North", Path::new("/dev/ttyUSB0"), 115_200, 1), ("South", Path::new("/dev/ttyUSB1"), 9600, 2)]
    );
}

#[test]
fn doubles_are_refused() {
    for (from, to, message) in [
        ("South", "North", r#"plant.toml: controller[2].name: "North" is also that of controller[1] "North""#),
        (
            "ttyUSB1",
            "ttyUSB0",
            r#"plant.toml: controller[2].port: "/dev/ttyUSB0" is also that of controller[1] "North""#,
        ),
        (
            "well-pump-2.toml",
            "well-pump-1.toml",
            "plant.toml: controller[2].machine: tag 1 is also that of controller[1] \"North\"\n\
             plant.toml: controller[2].machine: \"Well pump 1\" is also that of controller[1] \"North\"",
        ),
    ] {
        assert_eq!(error_of(&PLANT.replacen(from, to, 1)), message);
    }
}

#[test]
fn mistakes_of_plant_and_machines_come_together() {
    let folder = folder(&PLANT.replace("\"9600 Bd\"", "9600").replace("store", "stor"));
    let machine = folder.path().join("well-pump-1.toml");
    let text = fs::read_to_string(&machine).unwrap().replace("\"1480 rpm\"", "1480");
    fs::write(&machine, text).unwrap();
    let error = PlantConfig::load(&folder.path().join("plant.toml")).unwrap_err().to_string();
    let error = error.replace(&format!("{}/", folder.path().display()), "");
    assert_eq!(
        error.lines().collect::<Vec<_>>(),
        [
            "plant.toml: store: missing; write e.g. store = \"waterworks.db\"",
            "plant.toml:2: stor: unknown key; did you mean store? allowed here: name, store, controller",
            "plant.toml:12: controller[2].baud: 9600 has no unit; write e.g. \"9600 Bd\" (Bd allowed)",
            "well-pump-1.toml:22: curve.speed: 1480 has no unit; write e.g. \"1480 rpm\" (rpm, rev/s, rad/s allowed)",
        ]
    );
}

#[test]
fn a_plant_without_controllers_or_machine_files_is_refused() {
    assert_eq!(
        error_of("name = \"W\"\nstore = \"w.db\"\n"),
        "plant.toml: controller: missing; a plant has at least one [[controller]]"
    );
    let error = error_of(&PLANT.replace("well-pump-2.toml", "no.toml"));
    assert!(error.starts_with("plant.toml:13: controller[2].machine: cannot read no.toml: "), "{error}");
    assert_eq!(
        error_of("controller = 5\nname = \"W\"\nstore = \"w.db\"\n").lines().next(),
        Some("plant.toml:1: controller: 5 where tables [[controller]] belong")
    );
}

#[test]
fn the_demo_files_are_right_and_without_notes() {
    let AnyFile::Plant(plant) = config::load_any(&demo("waterworks.toml")).unwrap() else { panic!("a plant file") };
    assert_eq!(plant.controllers.len(), 2);
    for controller in &plant.controllers {
        assert_eq!(controller.machine.warnings, Vec::<String>::new(), "{}", controller.name);
        let best = controller.machine.best_efficiency;
        // The simulated pump: best efficiency near 77 m³/h and 33.5 m, 77.7 %.
        assert!((best.flow * 3600.0 - 77.0).abs() < 3.0 && (best.efficiency - 0.777).abs() < 0.002, "{best:?}");
    }
}

fn check(path: &Path) -> (i32, String, String) {
    let output = Command::new(env!("CARGO_BIN_EXE_offcurve")).arg("check").arg(path).output().unwrap();
    (
        output.status.code().unwrap(),
        String::from_utf8(output.stdout).unwrap(),
        String::from_utf8(output.stderr).unwrap(),
    )
}

#[test]
fn check_prints_what_a_person_would_verify() {
    let (code, out, err) = check(&demo("well-pump-2.toml"));
    assert_eq!((code, err.as_str()), (0, ""));
    for piece in [
        "machine \"Well pump 2\", tag 2, from ",
        "best efficiency point  77.61 m3/h (found on the curve), 33.4 m, 9.078 kW, efficiency 77.71 %",
        "specific speed         15.64 ",
        "slip factor 0.8145 (Wiesner)",
        "flow                   loop input 0, 4 mA is 0 m3/h, 20 mA is 160 m3/h; standard uncertainty 0.5 % + 0.35 m3/h",
        "suction_pressure       loop input 1, 4 mA is -1 bar, 20 mA is 1.5 bar; standard uncertainty 0.007 bar",
        "watched                head against the curve, shaft power against the curve, failed sensors",
        "no notes",
    ] {
        assert!(out.contains(piece), "no {piece:?} in\n{out}");
    }
    let (code, out, _) = check(&demo("waterworks.toml"));
    assert_eq!(code, 0);
    assert!(out.contains("controller \"Pump house 2\" at /dev/ttyUSB1, 115200 Bd"), "{out}");
    assert_eq!(out.matches("best efficiency point").count(), 2);
}

#[test]
fn check_ends_with_64_and_all_mistakes() {
    let folder = folder(&PLANT.replace("\"9600 Bd\"", "\"9600 rpm\"").replace("name = \"North\"\n", ""));
    let (code, out, err) = check(&folder.path().join("plant.toml"));
    assert_eq!((code, out.as_str()), (64, ""));
    assert!(err.contains("plant.toml:4: controller[1].name: missing; write e.g. name = \"pump house\""), "{err}");
    assert!(
        err.contains("plant.toml:11: controller[2].baud: \"9600 rpm\": \"rpm\" is no unit of symbol rate (Bd allowed)"),
        "{err}"
    );
    fs::write(folder.path().join("other.toml"), "x = 1\n").unwrap();
    let (code, _, err) = check(&folder.path().join("other.toml"));
    assert_eq!(code, 64);
    assert!(err.contains("neither a machine file (it has no machine = \"name\") nor a plant file"), "{err}");
    let (code, _, err) = check(&folder.path().join("none.toml"));
    assert_eq!(code, 64);
    assert!(err.contains("cannot read "), "{err}");
}
