//! A made-up machine: adapters with and without serial numbers, their names
//! by identity and by socket, and real pseudo-terminals behind them.

// Each test program uses a part of this.
#![allow(dead_code)]

use std::os::unix::fs::symlink;
use std::path::{Path, PathBuf};
use tarecup_simulators::pty::Pty;

/// A made-up machine with two adapters of one kind, real pseudo-terminals behind them.
pub struct Bench {
    pub root: tempfile::TempDir,
    pub ptys: Vec<(&'static str, Pty)>,
}

impl Bench {
    pub fn new() -> Self {
        let root = tempfile::tempdir().expect("a folder");
        for folder in ["dev/serial/by-id", "dev/serial/by-path", "sys/class/tty", "sys/devices"] {
            std::fs::create_dir_all(root.path().join(folder)).expect("a folder");
        }
        Self { root, ptys: Vec::new() }
    }

    pub fn at(&self, path: &str) -> PathBuf {
        self.root.path().join(path)
    }

    /// An adapter is plugged into a socket: it gets a name by the socket and one of the kernel's.
    pub fn plug(&mut self, socket: &'static str, number: &str) {
        let pty = Pty::open(&self.at(&format!("dev/serial/by-path/{socket}"))).expect("a pseudo-terminal");
        let name = pty.device().and_then(Path::file_name).expect("a device").to_owned();
        let usb = self.at("sys/devices").join(socket);
        std::fs::create_dir_all(&usb).expect("a folder");
        for (file, text) in [("idVendor", "1111"), ("idProduct", "2222"), ("serial", number)] {
            std::fs::write(usb.join(file), text).expect("a file");
        }
        let class = self.at("sys/class/tty").join(name);
        std::fs::create_dir_all(&class).expect("a folder");
        let _ = std::fs::remove_file(class.join("device"));
        symlink(&usb, class.join("device")).expect("a link");
        self.ptys.push((socket, pty));
    }

    pub fn unplug(&mut self, socket: &str) {
        let (_, pty) = self.ptys.iter_mut().find(|(s, _)| *s == socket).expect("plugged");
        let class = self.root.path().join("sys/class/tty").join(pty.device().and_then(Path::file_name).expect("a device"));
        pty.unplug();
        std::fs::remove_dir_all(class).expect("removed");
        self.ptys.retain(|(s, _)| *s != socket);
    }

    /// The name that both adapters of a kind claim leads to the one at this socket.
    pub fn claim(&self, socket: &str) {
        let (fresh, link) = (self.at("dev/serial/by-id/.new"), self.at("dev/serial/by-id/adapter"));
        let pty = &self.ptys.iter().find(|(s, _)| *s == socket).expect("plugged").1;
        symlink(pty.device().expect("a device"), &fresh).expect("a link");
        std::fs::rename(fresh, link).expect("renamed");
    }

    pub fn say(&mut self, socket: &str, line: &[u8]) {
        self.ptys.iter_mut().find(|(s, _)| *s == socket).expect("plugged").1.write(line).expect("written");
    }
}
