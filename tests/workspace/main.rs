//! Who may depend on whom, and which versions: properties of the workspace that no single crate can check.
//!
//! The plant model must know nothing of the core, or a test of one against the other would check code against itself.
//! Host and controller must compute the same bits, so the crates below the core must have the same versions in the two
//! lock files: the boards are a workspace of their own.

mod core_source;

use std::{
    collections::{BTreeMap, BTreeSet},
    fs,
    path::{Path, PathBuf},
    process::Command,
};

fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).parent().expect("the tests lie in the workspace").to_owned()
}

/// Names of our own crates in a `cargo tree` listing with one `name v1.2.3 …` per line.
fn ours(listing: &str) -> BTreeSet<&str> {
    listing
        .lines()
        .filter_map(|line| line.split_whitespace().next())
        .filter(|name| name.starts_with("offcurve"))
        .collect()
}

#[test]
fn the_plant_model_depends_on_no_crate_of_ours() {
    let cargo = std::env::var_os("CARGO").unwrap_or_else(|| "cargo".into());
    let tree = |package: &str| {
        let output = Command::new(&cargo)
            .current_dir(root())
            .args(["tree", "--locked", "-p", package, "-e", "normal,build,dev", "--target", "all", "--prefix", "none"])
            .output()
            .expect("cargo can be started");
        assert!(output.status.success(), "cargo tree -p {package}: {}", String::from_utf8_lossy(&output.stderr));
        String::from_utf8(output.stdout).expect("cargo writes UTF-8")
    };
    let plant = tree("offcurve-plant");
    assert_eq!(ours(&plant), BTreeSet::from(["offcurve-plant"]), "{plant}");
    // The listing does name our crates where there are some.
    assert!(ours(&tree("offcurve-tests")).contains("offcurve-core"));
}

/// One package of a lock file: version and the names it depends on (a version behind the name where it needs one).
struct Package {
    version: String,
    checksum: Option<String>,
    dependencies: Vec<String>,
}

/// Packages of a lock file by name; several versions of one crate lie side by side.
type Lock = BTreeMap<String, Vec<Package>>;

fn parse(text: &str) -> Result<Lock, String> {
    let table: toml::Table = text.parse().map_err(|error| format!("no TOML: {error}"))?;
    let packages = table.get("package").and_then(toml::Value::as_array).ok_or("no [[package]]")?;
    let mut lock = Lock::new();
    for package in packages {
        let text = |key: &str| package.get(key).and_then(toml::Value::as_str).map(str::to_owned);
        let dependencies = package.get("dependencies").and_then(toml::Value::as_array).into_iter().flatten();
        lock.entry(text("name").ok_or("a package without a name")?).or_default().push(Package {
            version: text("version").ok_or("a package without a version")?,
            checksum: text("checksum"),
            dependencies: dependencies.filter_map(toml::Value::as_str).map(str::to_owned).collect(),
        });
    }
    Ok(lock)
}

fn read(path: &Path) -> Lock {
    let text = std::fs::read_to_string(path).unwrap_or_else(|error| panic!("cannot read {}: {error}", path.display()));
    parse(&text).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

/// What a lock file gives to the core: every crate below it, without those that only its tests use.
fn below_core(lock: &Lock) -> Result<BTreeMap<String, (String, Option<String>)>, String> {
    const ONLY_IN_TESTS: [&str; 1] = ["proptest"];
    let mut found = BTreeMap::new();
    let mut waiting = vec!["offcurve-core".to_owned()];
    while let Some(wanted) = waiting.pop() {
        let (name, version) = wanted.split_once(' ').map_or((wanted.as_str(), None), |(name, rest)| (name, Some(rest)));
        let candidates = lock.get(name).ok_or(format!("{name} is needed but not in the lock file"))?;
        let package = candidates
            .iter()
            .find(|package| version.is_none_or(|version| package.version == version))
            .ok_or(format!("{wanted} is needed but not in the lock file"))?;
        if found.insert(name.to_owned(), (package.version.clone(), package.checksum.clone())).is_none() {
            let needed = package.dependencies.iter().filter(|name| !ONLY_IN_TESTS.contains(&name.as_str()));
            waiting.extend(needed.cloned());
        }
    }
    found.remove("offcurve-core");
    Ok(found)
}

/// Crates that both lock files must give the core; each takes part in an estimate or a frame.
const SHARED: [&str; 5] = ["crc", "crc-catalog", "embedded-hal", "heapless", "micromath"];

/// Differences between what two lock files give the core; optional crates may be in one only.
fn differences(host: &Lock, boards: &Lock) -> Result<Vec<String>, String> {
    let (host, boards) = (below_core(host)?, below_core(boards)?);
    let absent = SHARED.iter().filter(|name| !host.contains_key(**name) || !boards.contains_key(**name));
    let mut all: Vec<String> = absent.map(|name| format!("{name} is not in both")).collect();
    for (name, on_host) in &host {
        if let Some(on_boards) = boards.get(name)
            && on_boards != on_host
        {
            all.push(format!("{name}: host {}, boards {}", on_host.0, on_boards.0));
        }
    }
    Ok(all)
}

#[test]
fn host_and_boards_build_the_core_from_the_same_versions() {
    let boards = root().join("hil-fixtures/boards/Cargo.lock");
    let found = differences(&read(&root().join("Cargo.lock")), &read(&boards)).expect("both lock files hold the core");
    assert!(found.is_empty(), "run cargo update --precise in one of the workspaces: {found:?}");
}

/// The comparison itself: it must see another version and another source of the same version, below the core only.
#[test]
fn another_version_below_the_core_is_seen() {
    let lock = |heapless: &str, other: &str| {
        let mut text = String::from("version = 4\n");
        for (name, version, needs) in [
            ("offcurve-core", "0.1.0", r#""crc", "embedded-hal 1.0.0", "heapless", "micromath", "proptest""#),
            ("crc", "3.4.0", r#""crc-catalog""#),
            ("crc-catalog", "2.5.0", ""),
            ("embedded-hal", "0.2.7", r#""nb""#),
            ("embedded-hal", "1.0.0", ""),
            ("heapless", heapless, ""),
            ("micromath", "2.1.0", ""),
            ("nb", other, ""),
            ("proptest", other, ""),
        ] {
            text.push_str(&format!(
                "[[package]]\nname = \"{name}\"\nversion = \"{version}\"\ndependencies = [{needs}]\n"
            ));
        }
        parse(&text).expect("a lock file")
    };
    assert_eq!(differences(&lock("0.9.4", "1.0.0"), &lock("0.9.4", "1.1.0")), Ok(vec![]));
    let seen = differences(&lock("0.9.4", "1.0.0"), &lock("0.9.5", "1.0.0"));
    assert_eq!(seen, Ok(vec!["heapless: host 0.9.4, boards 0.9.5".to_owned()]));
    let (host, mut boards) = (lock("0.9.4", "1.0.0"), lock("0.9.4", "1.0.0"));
    boards.get_mut("micromath").expect("it is there")[0].checksum = Some("another".to_owned());
    assert_eq!(differences(&host, &boards).map(|all| all.len()), Ok(1));
    boards.remove("micromath");
    assert!(differences(&host, &boards).is_err());
}

/// Names under the tables of a manifest whose name ends in `dependencies`, our own crates left out.
fn foreign_dependencies(manifest: &toml::Table) -> Vec<String> {
    let mut found = Vec::new();
    for (key, value) in manifest {
        let toml::Value::Table(table) = value else { continue };
        if key.ends_with("dependencies") {
            found.extend(table.keys().filter(|name| !name.starts_with("offcurve")).cloned());
        } else {
            found.extend(foreign_dependencies(table));
        }
    }
    found
}

#[test]
fn every_dependency_is_justified_in_one_line() {
    let text = fs::read_to_string(root().join("DEVELOPERS.md")).expect("it is part of the project");
    let named: Vec<&str> = text
        .lines()
        .filter_map(|line| line.strip_prefix("| ")?.split_once(" | ").map(|(names, _)| names))
        .flat_map(|names| names.split(", "))
        .map(|name| name.split(' ').next().unwrap_or(name))
        .collect();
    let manifests = [
        "Cargo.toml",
        "firmware-core/Cargo.toml",
        "host-daemon/Cargo.toml",
        "hil-fixtures/controller/Cargo.toml",
        "hil-fixtures/plant/Cargo.toml",
        "hil-fixtures/rig/Cargo.toml",
        "hil-fixtures/boards/emulated-m4f/Cargo.toml",
        "tests/Cargo.toml",
    ];
    for manifest in manifests {
        let text = fs::read_to_string(root().join(manifest)).expect("a manifest");
        let dependencies = foreign_dependencies(&text.parse().expect("a TOML table"));
        assert!(manifest == "Cargo.toml" || !dependencies.is_empty(), "{manifest} needs nothing?");
        for name in dependencies {
            assert!(named.contains(&name.as_str()), "{manifest}: {name} has no line in DEVELOPERS.md");
        }
    }
}
