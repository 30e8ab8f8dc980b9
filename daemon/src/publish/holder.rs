//! Who listens on a port: for the message that an address is in use.

use std::fs;
use std::net::SocketAddr;
use std::path::Path;

/// Name and process id of the local program that listens on this port, where the system tells.
#[must_use]
pub fn holder_of(address: SocketAddr) -> Option<String> {
    let inodes: Vec<String> = ["/proc/net/tcp", "/proc/net/tcp6"]
        .iter()
        .filter_map(|table| fs::read_to_string(table).ok())
        .flat_map(|text| listeners(&text, address.port()))
        .collect();
    let wanted: Vec<String> = inodes.iter().map(|inode| format!("socket:[{inode}]")).collect();
    if wanted.is_empty() {
        return None;
    }
    fs::read_dir("/proc").ok()?.flatten().find_map(|process| {
        let name = process.file_name();
        let pid = name.to_str()?.parse::<u32>().ok()?;
        holds(&process.path(), &wanted).then(|| {
            let command = fs::read_to_string(process.path().join("comm")).unwrap_or_default();
            format!("{} (process {pid})", command.trim())
        })
    })
}

/// Inodes of the listening sockets on this port, from the kernel's table.
fn listeners(table: &str, port: u16) -> Vec<String> {
    const LISTENS: &str = "0A";
    let suffix = format!(":{port:04X}");
    table
        .lines()
        .skip(1)
        .filter_map(|line| {
            let field: Vec<&str> = line.split_whitespace().collect();
            (field.get(1)?.ends_with(&suffix) && *field.get(3)? == LISTENS).then(|| field.get(9).map(|s| (*s).to_owned()))?
        })
        .collect()
}

fn holds(process: &Path, wanted: &[String]) -> bool {
    let Ok(descriptors) = fs::read_dir(process.join("fd")) else { return false };
    descriptors.flatten().any(|fd| fs::read_link(fd.path()).is_ok_and(|to| wanted.iter().any(|w| to.as_os_str() == w.as_str())))
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::net::TcpListener;

    #[test]
    fn the_program_that_listens_is_named() {
        let listener = TcpListener::bind("127.0.0.1:0").expect("a free port");
        let address = listener.local_addr().expect("an address");
        let holder = holder_of(address).expect("found");
        assert!(holder.contains(&format!("process {}", std::process::id())), "{holder}");
        drop(listener);
        assert_eq!(holder_of(address), None);
    }
}
