//! What the program says to somebody who mistyped: which file or value, what is wrong, what is allowed, said once; and
//! an exit code that a script can use.

use std::{
    fs,
    path::Path,
    process::{Command, Output},
};

fn offcurve(folder: &Path, arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_offcurve")).current_dir(folder).args(arguments).output().expect("it starts")
}

/// Runs it, wants this exit code, and gives what it said.
fn refused(folder: &Path, arguments: &[&str], code: i32) -> String {
    let output = offcurve(folder, arguments);
    let text = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(code), "{arguments:?}: {text}");
    assert!(!text.contains("panicked") && !text.contains("RUST_BACKTRACE"), "{text}");
    text
}

/// A folder with the demo's files in it.
fn folder() -> tempfile::TempDir {
    let folder = tempfile::tempdir().unwrap();
    for name in ["waterworks.toml", "well-pump-1.toml", "well-pump-2.toml"] {
        fs::copy(Path::new(env!("CARGO_MANIFEST_DIR")).join("demo").join(name), folder.path().join(name)).unwrap();
    }
    fs::write(folder.path().join("binary"), [0x7f, b'E', b'L', b'F', 0xff, 0xfe, 0, 1]).unwrap();
    folder
}

#[test]
fn a_cause_is_said_once() {
    let folder = folder();
    let replay = |machine, input, out| vec!["replay", "--machine", machine, "--input", input, "--out", out];
    for (arguments, code) in [
        (vec!["check", "nowhere.toml"], 64),
        (vec!["watch", "--config", "nowhere.toml"], 64),
        (replay("well-pump-1.toml", "nowhere.toml", "out"), 1),
    ] {
        let text = refused(folder.path(), &arguments, code);
        assert!(text.contains("nowhere.toml"), "{text}");
        assert_eq!(text.matches("No such file").count(), 1, "{text}");
    }
}

#[test]
fn a_wrong_command_line_ends_with_64_and_help_with_0() {
    let folder = folder();
    for arguments in [&["wath"][..], &["check"], &["watch", "--config"], &["demo", "--for", "0"], &[]] {
        refused(folder.path(), arguments, 64);
    }
    for arguments in [&["--help"][..], &["--version"], &["check", "--help"]] {
        let output = offcurve(folder.path(), arguments);
        assert_eq!(output.status.code(), Some(0));
        assert!(!output.stdout.is_empty() && output.stderr.is_empty());
    }
}

#[test]
fn a_file_of_another_kind_is_called_what_it_is() {
    let folder = folder();
    let text = refused(folder.path(), &["watch", "--config", "well-pump-1.toml"], 64);
    assert!(text.contains("this is a machine file; a plant file is wanted"), "{text}");
    assert_eq!(text.lines().count(), 1, "{text}");
    let arguments = ["replay", "--machine", "waterworks.toml", "--input", "binary", "--out", "out"];
    let text = refused(folder.path(), &arguments, 64);
    assert!(text.contains("this is a plant file; a machine file is wanted"), "{text}");
    let text = refused(folder.path(), &["check", "binary"], 64);
    assert!(text.contains("binary: not a text in UTF-8"), "{text}");
    // A machine file whose name was forgotten is still a machine file, though it has a table [controller].
    let nameless = fs::read_to_string(folder.path().join("well-pump-1.toml")).unwrap().replace("machine = ", "# ");
    fs::write(folder.path().join("nameless.toml"), nameless).unwrap();
    let text = refused(folder.path(), &["check", "nameless.toml"], 64);
    assert!(text.contains("machine: missing; write e.g. machine ="), "{text}");
    assert_eq!(text.lines().count(), 1, "{text}");
}

#[test]
fn a_store_that_cannot_be_is_named_with_what_it_needs() {
    let folder = folder();
    let plant = fs::read_to_string(folder.path().join("waterworks.toml")).unwrap();
    for (store, wanted) in [
        (".", "is not an offcurve store"),
        ("missing/w.db", "the folder ./missing of the store does not exist"),
        ("/proc/w.db", "needs the right to write the file and its folder"),
    ] {
        fs::write(folder.path().join("plant.toml"), plant.replace("waterworks.db", store)).unwrap();
        let text = refused(folder.path(), &["watch", "--config", "./plant.toml"], 1);
        assert!(text.contains(wanted), "{store}: {text}");
    }
}

#[test]
#[cfg(feature = "demo")]
fn an_image_without_an_emulated_controller_is_not_ignored() {
    let text = refused(folder().path(), &["demo", "--image", "some.elf"], 1);
    assert!(text.contains("--controller emulated"), "{text}");
}

#[test]
#[cfg(feature = "demo")]
fn a_negative_speed_is_a_wrong_speed() {
    let text = refused(folder().path(), &["demo", "--speed", "-1"], 64);
    assert!(text.contains("a number from 0.1 to 200"), "{text}");
}

/// `offcurve check plant.toml | head` is no fault of anybody; a full disk is one, and is said.
#[test]
fn an_output_that_takes_nothing_is_no_panic() {
    let folder = folder();
    let recording = "time,speed_rpm,flow_m3h,suction_bar,discharge_bar,torque_Nm\n0,1480,80,0.2,3.4,60\nx\n";
    fs::write(folder.path().join("run.csv"), recording).unwrap();
    let replay = ["replay", "--machine", "well-pump-1.toml", "--input", "run.csv", "--out", "out"];
    for arguments in [&["check", "waterworks.toml"][..], &["ports"], &replay] {
        let run = |stdout: std::process::Stdio| {
            let mut command = Command::new(env!("CARGO_BIN_EXE_offcurve"));
            let output = command.current_dir(folder.path()).args(arguments).stdout(stdout).output().unwrap();
            (output.status.code(), String::from_utf8_lossy(&output.stderr).into_owned())
        };
        let (reader, writer) = std::io::pipe().unwrap();
        drop(reader);
        let (code, text) = run(writer.into());
        assert!(code == Some(0) && !text.contains("panicked"), "{arguments:?} to nobody: {code:?} {text}");
        let (code, text) = run(fs::File::options().write(true).open("/dev/full").unwrap().into());
        assert_eq!(code, Some(1), "{arguments:?}: {text}");
        assert!(text.contains("cannot write to standard output: No space left"), "{text}");
        assert!(!text.contains("panicked"), "{text}");
    }
}

/// The demo goes on when the reader of its words has gone, and ends as it was told.
#[cfg(feature = "demo")]
#[test]
fn a_demo_that_nobody_reads_ends_in_its_time() {
    let folder = folder();
    let (reader, writer) = std::io::pipe().unwrap();
    drop(reader);
    let mut command = Command::new(env!("CARGO_BIN_EXE_offcurve"));
    let output =
        command.current_dir(folder.path()).args(["demo", "--for", "1s", "--dir", "d"]).stdout(writer).output().unwrap();
    let text = String::from_utf8_lossy(&output.stderr);
    assert!(output.status.success() && !text.contains("panicked"), "{:?}: {text}", output.status);
}
