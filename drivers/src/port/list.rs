//! The serial ports of this machine, by names that stay the same.

use super::open::holder;
use super::place::Machine;
use serialport::SerialPortType;
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};

/// A serial port that was found.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub struct Found {
    /// The path to write in the settings: the same after unplugging and after a restart, where the machine gives such a name.
    pub stable: String,
    /// The device it is now.
    pub device: String,
    /// What the adapter says of itself; empty when it says nothing.
    pub about: String,
    /// The socket it is plugged into, where the machine names it.
    pub socket: Option<String>,
    /// Its adapter can be told from another of its kind by the socket only.
    pub twin: bool,
}

impl Found {
    /// The program that has it open, if one has. The port is not opened for that.
    pub fn holder(&self) -> Option<String> {
        let pid = holder(Path::new(&self.device))?;
        let name = std::fs::read_to_string(format!("/proc/{pid}/comm")).unwrap_or_default();
        Some(format!("'{}' (process {pid})", name.trim()))
    }
}

/// All serial ports that can be found. No port is opened.
pub fn list() -> Vec<Found> {
    list_on(&Machine::default())
}

/// All serial ports of a machine. No port is opened.
pub fn list_on(machine: &Machine) -> Vec<Found> {
    // The library stops the program on machines without this folder, and knows only the one it runs on.
    let own = *machine == Machine::default() && machine.sys.is_dir();
    let known = if own { serialport::available_ports().unwrap_or_default() } else { Vec::new() };
    let known = known.into_iter().map(|p| (PathBuf::from(p.port_name), about(&p.port_type))).collect();
    list_in(machine, known)
}

/// Changes whenever a port may have come or gone; cheap enough to be asked every second.
pub fn mark(machine: &Machine) -> [Option<std::time::SystemTime>; 3] {
    ["", "serial/by-id", "serial/by-path"]
        .map(|folder| std::fs::metadata(machine.dev.join(folder)).and_then(|m| m.modified()).ok())
}

fn about(kind: &SerialPortType) -> String {
    match kind {
        SerialPortType::UsbPort(usb) => {
            let words = [usb.manufacturer.as_deref(), usb.product.as_deref()];
            let mut text = words.into_iter().flatten().collect::<Vec<_>>().join(" ");
            if let Some(number) = &usb.serial_number {
                text.push_str(&format!(", serial number {number}"));
            }
            format!("USB {:04x}:{:04x} {text}", usb.vid, usb.pid).trim_end().to_owned()
        }
        SerialPortType::PciPort => "port on a plug-in card".into(),
        SerialPortType::BluetoothPort => "Bluetooth".into(),
        SerialPortType::Unknown => "built-in port".into(),
    }
}

fn list_in(machine: &Machine, mut known: BTreeMap<PathBuf, String>) -> Vec<Found> {
    let Machine { dev, sys } = machine;
    // Names by identity first: two adapters without serial numbers share one,
    // and the second is then told apart by the socket it is plugged into.
    let mut stable: BTreeMap<PathBuf, PathBuf> = BTreeMap::new();
    for folder in ["serial/by-id", "serial/by-path"] {
        for link in entries(&dev.join(folder)) {
            if let Ok(device) = std::fs::canonicalize(&link) {
                stable.entry(device).or_insert(link);
            }
        }
    }
    for device in entries(dev) {
        let name = device.file_name().and_then(|n| n.to_str()).unwrap_or_default();
        if name.starts_with("ttyUSB") || name.starts_with("ttyACM") {
            known.entry(device).or_default();
        }
    }
    for device in stable.keys() {
        known.entry(device.clone()).or_default();
    }
    known.retain(|device, _| exists(device, sys));
    let text = |path: &Path| path.to_string_lossy().into_owned();
    let found = known.into_iter().map(|(device, about)| {
        let place = machine.place_of(&device);
        let twin = machine.is_usb(&device) && place.number.is_none();
        // What two adapters may claim is no name to keep: the socket is.
        let by_path = place.socket.as_ref().map(|s| dev.join("serial/by-path").join(s)).filter(|p| twin && p.exists());
        let lasting = by_path.as_ref().or(stable.get(&device)).unwrap_or(&device);
        Found { stable: text(lasting), device: text(&device), about, socket: place.socket, twin }
    });
    found.collect()
}

pub(super) fn entries(folder: &Path) -> Vec<PathBuf> {
    let mut paths: Vec<PathBuf> = std::fs::read_dir(folder).into_iter().flatten().flatten().map(|e| e.path()).collect();
    paths.sort();
    paths
}

/// Four built-in ports have a device file whether there is hardware or not; type 0 says that there is none.
fn exists(device: &Path, sys: &Path) -> bool {
    let name = device.file_name().and_then(|n| n.to_str()).unwrap_or_default();
    !name.starts_with("ttyS") || std::fs::read_to_string(sys.join(name).join("type")).is_ok_and(|t| t.trim() != "0")
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::os::unix::fs::symlink;

    #[test]
    fn names_by_identity_then_by_socket_then_the_device() {
        let root = tempfile::tempdir().expect("a folder");
        let dev = root.path().canonicalize().expect("a folder").join("dev");
        let sys = root.path().join("sys");
        for folder in ["dev/serial/by-id", "dev/serial/by-path", "sys/ttyS0", "sys/ttyS1"] {
            std::fs::create_dir_all(root.path().join(folder)).expect("a folder");
        }
        for file in ["ttyUSB0", "ttyUSB1", "ttyACM0", "ttyS0", "ttyS1", "tty7"] {
            std::fs::write(dev.join(file), "").expect("a file");
        }
        std::fs::write(sys.join("ttyS0/type"), "4\n").expect("a file");
        std::fs::write(sys.join("ttyS1/type"), "0\n").expect("a file");
        symlink("../../ttyUSB0", dev.join("serial/by-id/adapter-A")).expect("a link");
        symlink("../../ttyUSB0", dev.join("serial/by-path/socket-1")).expect("a link");
        symlink("../../ttyUSB1", dev.join("serial/by-path/socket-2")).expect("a link");
        symlink("../../ttyUSB9", dev.join("serial/by-id/unplugged")).expect("a link");
        let known = BTreeMap::from([(dev.join("ttyS0"), "built-in port".to_owned()), (dev.join("ttyS1"), String::new())]);
        let found = list_in(&Machine { dev: dev.clone(), sys }, known);
        let names: Vec<(&str, &str)> = found
            .iter()
            .map(|f| {
                let short = |p: &'_ str| p.rsplit('/').next().map(str::len).unwrap_or(0);
                (&f.stable[f.stable.len() - short(&f.stable)..], &f.device[f.device.len() - short(&f.device)..])
            })
            .collect();
        assert_eq!(names, [("ttyACM0", "ttyACM0"), ("ttyS0", "ttyS0"), ("adapter-A", "ttyUSB0"), ("socket-2", "ttyUSB1")]);
    }

    #[test]
    fn this_machine_can_be_listed() {
        for found in list() {
            assert!(!found.stable.is_empty() && Path::new(&found.device).exists(), "{found:?}");
        }
    }
}
