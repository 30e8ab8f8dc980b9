//! Which adapter a device is, and where it is plugged in.
//!
//! An adapter with a serial number of its own is known wherever it is plugged
//! in. One without can only be told from its twin by its socket.

use std::path::{Path, PathBuf};

/// Where a machine keeps its devices; another folder in tests.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Machine {
    /// `/dev`
    pub dev: PathBuf,
    /// `/sys/class/tty`
    pub sys: PathBuf,
}

impl Default for Machine {
    fn default() -> Self {
        Self::below(Path::new("/"))
    }
}

/// What tells one adapter from another.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Place {
    /// Its number, when no other adapter here has the same.
    pub number: Option<String>,
    /// The socket it is plugged into, where the machine names it.
    pub socket: Option<String>,
}

impl Machine {
    /// A machine whose folders lie below this one.
    pub fn below(root: &Path) -> Self {
        Self { dev: root.join("dev"), sys: root.join("sys/class/tty") }
    }

    /// Which adapter is behind a path now. Nothing is opened.
    pub fn place_of(&self, path: &Path) -> Place {
        let Ok(device) = std::fs::canonicalize(path) else { return Place::default() };
        let Some(name) = device.file_name() else { return Place::default() };
        let usb = self.usb(name);
        let socket = self.by_path(&device).or_else(|| Some(usb.as_ref()?.folder.file_name()?.to_string_lossy().into_owned()));
        let number = usb.and_then(|own| {
            let number = own.number.clone().filter(|n| !n.is_empty())?;
            let same = |other: &Usb| other.folder != own.folder && other.number == own.number && other.ids == own.ids;
            (!self.all_usb().any(|other| same(&other))).then_some(number)
        });
        Place { number, socket }
    }

    /// Whether it is behind a USB adapter.
    pub(super) fn is_usb(&self, device: &Path) -> bool {
        device.file_name().is_some_and(|name| self.usb(name).is_some())
    }

    /// Its name by the socket.
    fn by_path(&self, device: &Path) -> Option<String> {
        let leads = |link: &PathBuf| std::fs::canonicalize(link).is_ok_and(|to| to == device);
        let link = super::list::entries(&self.dev.join("serial/by-path")).into_iter().find(leads)?;
        Some(link.file_name()?.to_string_lossy().into_owned())
    }

    fn all_usb(&self) -> impl Iterator<Item = Usb> {
        let names = std::fs::read_dir(&self.sys).into_iter().flatten().flatten().map(|e| e.file_name());
        // Consoles, of which a machine has dozens, are no adapters.
        let names = names.filter(|n| self.sys.join(n).join("device").exists());
        names.filter_map(|n| self.usb(&n)).collect::<Vec<_>>().into_iter()
    }

    fn usb(&self, name: &std::ffi::OsStr) -> Option<Usb> {
        let device = std::fs::canonicalize(self.sys.join(name).join("device")).ok()?;
        let folder = device.ancestors().take(8).find(|f| f.join("idVendor").exists())?.to_path_buf();
        let text = |file: &str| std::fs::read_to_string(folder.join(file)).ok().map(|t| t.trim().to_owned());
        Some(Usb { ids: (text("idVendor"), text("idProduct")), number: text("serial"), folder })
    }
}

struct Usb {
    folder: PathBuf,
    ids: (Option<String>, Option<String>),
    number: Option<String>,
}

impl Place {
    /// What the adapter is known by: its number, else its socket.
    pub fn known_by(&self) -> Option<String> {
        self.number.as_ref().map(|n| format!("number {n}")).or_else(|| self.socket.clone())
    }

    /// What it is known by now, when that is not what it was known by before: it may be another adapter.
    pub fn other_than(&self, before: Option<&str>) -> Option<String> {
        self.known_by().filter(|now| before.is_some_and(|b| b != now))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::os::unix::fs::symlink;

    /// An adapter of a made-up machine, at a socket of its bus.
    fn plug(root: &Path, name: &str, socket: &str, number: Option<&str>) {
        let folder = root.join("sys/devices/bus").join(socket);
        std::fs::create_dir_all(folder.join("tty")).expect("a folder");
        for (file, text) in [("idVendor", "1111\n"), ("idProduct", "2222\n"), ("serial", number.unwrap_or_default())] {
            std::fs::write(folder.join(file), text).expect("a file");
        }
        std::fs::create_dir_all(root.join("sys/class/tty").join(name)).expect("a folder");
        symlink(folder.join("tty"), root.join("sys/class/tty").join(name).join("device")).expect("a link");
        std::fs::create_dir_all(root.join("dev/serial/by-path")).expect("a folder");
        std::fs::write(root.join("dev").join(name), "").expect("a file");
        symlink(format!("../../{name}"), root.join("dev/serial/by-path").join(format!("bus-{socket}"))).expect("a link");
    }

    #[test]
    fn numbers_are_believed_only_when_nobody_shares_them() {
        let root = tempfile::tempdir().expect("a folder");
        for (name, socket, number) in
            [("a", "1", Some("77\n")), ("b", "2", Some("0001")), ("c", "3", Some("0001")), ("d", "4", None)]
        {
            plug(root.path(), name, socket, number);
        }
        let machine = Machine::below(root.path());
        let place = |name: &str| machine.place_of(&root.path().join("dev").join(name));
        assert_eq!(place("a"), Place { number: Some("77".into()), socket: Some("bus-1".into()) });
        for (name, socket) in [("b", "bus-2"), ("c", "bus-3"), ("d", "bus-4")] {
            assert_eq!(place(name), Place { number: None, socket: Some(socket.into()) });
        }
        assert_eq!(place("d").other_than(Some("bus-3")), Some("bus-4".into()));
        assert_eq!(place("a").other_than(Some("number 78")), Some("number 77".into()));
        for (name, before) in [("d", Some("bus-4")), ("d", None), ("a", Some("number 77")), ("nowhere", Some("bus-1"))] {
            assert_eq!(place(name).other_than(before), None, "{name} {before:?}");
        }
    }
}
