//! `offcurve ports`: which serial ports this computer has, and which name to put into the plant file.
//!
//! The names under `/dev/serial/by-id` stay with an adapter wherever it is plugged in, `ttyUSB0` does not. Two adapters
//! without serial numbers share one such name; `/dev/serial/by-path` then tells them apart by socket (from memory).

use serialport::{SerialPortInfo, SerialPortType};
use std::{
    collections::BTreeMap,
    fmt::Write,
    path::{Path, PathBuf},
    process::ExitCode,
};

/// List the serial ports of this computer.
#[derive(Debug, clap::Args)]
pub struct Ports {}

impl Ports {
    /// Prints the list; an empty one is no failure.
    ///
    /// # Errors
    /// When the system does not tell its ports.
    pub fn run(&self) -> anyhow::Result<ExitCode> {
        let ports = serialport::available_ports()?;
        super::say(&listing(&ports, &[Path::new("/dev/serial/by-id"), Path::new("/dev/serial/by-path")]))?;
        Ok(ExitCode::SUCCESS)
    }
}

/// The text for these ports and the lasting names in these folders, best folder first.
fn listing(ports: &[SerialPortInfo], folders: &[&Path]) -> String {
    let lasting = lasting_names(folders);
    let mut devices: BTreeMap<PathBuf, String> =
        ports.iter().map(|port| (PathBuf::from(&port.port_name), kind_words(&port.port_type))).collect();
    for device in lasting.keys() {
        devices.entry(device.clone()).or_insert_with(|| "adapter".to_owned());
    }
    let mut text = String::new();
    // Writing into a string does not fail.
    if devices.is_empty() {
        text += "This computer has no serial port now. Plug the adapter in and run `offcurve ports` again.\n";
        text += "Any path to a serial device can stand in the plant file, also one that is not there yet.\n";
    }
    for (device, kind) in &devices {
        let _ = writeln!(text, "{}: {kind}", device.display());
        let best = lasting.get(device).and_then(|names| names.first());
        let (name, note) = match best {
            Some(name) => (name, ""),
            // A built-in port (ttyS0) keeps its name, an adapter's counts up in the order of plugging in.
            None if is_numbered_adapter(device) => {
                (device, "   # no lasting name: may change when things are plugged in another order")
            }
            None => (device, ""),
        };
        let _ = writeln!(text, "    in the plant file: port = \"{}\"{note}", name.display());
    }
    text += "To open a port, the daemon's user must be in the group of the device, on most systems `dialout`:\n";
    text += "    sudo usermod -aG dialout USER    (then log in again)\n";
    text
}

fn is_numbered_adapter(device: &Path) -> bool {
    let name = device.file_name().unwrap_or_default().to_string_lossy();
    ["ttyUSB", "ttyACM"].iter().any(|kind| name.starts_with(kind))
}

/// Device to its lasting names.
fn lasting_names(folders: &[&Path]) -> BTreeMap<PathBuf, Vec<PathBuf>> {
    let mut names: BTreeMap<PathBuf, Vec<PathBuf>> = BTreeMap::new();
    for folder in folders {
        // The folder is there only while an adapter is plugged in.
        let Ok(entries) = std::fs::read_dir(folder) else { continue };
        let mut paths: Vec<PathBuf> = entries.filter_map(|entry| Some(entry.ok()?.path())).collect();
        paths.sort();
        for path in paths {
            if let Ok(device) = std::fs::canonicalize(&path) {
                names.entry(device).or_default().push(path);
            }
        }
    }
    names
}

fn kind_words(kind: &SerialPortType) -> String {
    match kind {
        SerialPortType::UsbPort(usb) => {
            let words = [&usb.manufacturer, &usb.product, &usb.serial_number].into_iter().flatten();
            let words: Vec<&str> = words.map(String::as_str).collect();
            if words.is_empty() { "USB adapter".into() } else { format!("USB adapter, {}", words.join(", ")) }
        }
        SerialPortType::PciPort => "built-in or PCI port".into(),
        SerialPortType::BluetoothPort => "Bluetooth".into(),
        SerialPortType::Unknown => "serial port".into(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn no_ports_is_said() {
        let text = listing(&[], &[]);
        assert!(text.contains("no serial port now") && text.contains("dialout"), "{text}");
    }

    #[test]
    fn the_lasting_name_is_the_one_to_use() {
        let folder = tempfile::tempdir().unwrap();
        let [device, other, built_in] = ["ttyUSB7", "ttyACM0", "ttyS0"].map(|name| folder.path().join(name));
        std::fs::write(&device, "").unwrap();
        let by_id = folder.path().join("by-id");
        std::fs::create_dir(&by_id).unwrap();
        std::os::unix::fs::symlink("../ttyUSB7", by_id.join("usb-adapter-if00")).unwrap();
        let port = |path: &Path| SerialPortInfo {
            port_name: path.to_string_lossy().into_owned(),
            port_type: SerialPortType::Unknown,
        };
        let device = std::fs::canonicalize(device).unwrap();
        let text = listing(&[port(&device), port(&other), port(&built_in)], &[&by_id, &folder.path().join("by-path")]);
        assert!(text.contains(&format!("port = \"{}\"\n", by_id.join("usb-adapter-if00").display())), "{text}");
        assert!(text.contains(&format!("port = \"{}\"   # no lasting name", other.display())), "{text}");
        assert!(text.contains(&format!("port = \"{}\"\n", built_in.display())), "{text}");
        assert_eq!(text.matches("in the plant file").count(), 3);
    }
}
