//! The simulated cable, seen from the program that opens it.

use nix::fcntl::OFlag;
use std::fs::{File, OpenOptions};
use std::io::{ErrorKind, Read, Write};
use std::os::unix::fs::OpenOptionsExt;
use std::path::Path;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};
use tarecup_simulators::pty::{Pty, PtyError};

/// Opens a link as a plain program would: no terminal settings are touched.
fn open(link: &Path) -> File {
    let flags = (OFlag::O_NOCTTY | OFlag::O_NONBLOCK).bits();
    OpenOptions::new().read(true).write(true).custom_flags(flags).open(link).unwrap()
}

/// Reads so many bytes, at most two seconds long.
fn read(file: &mut File, n: usize) -> Vec<u8> {
    let until = Instant::now() + Duration::from_secs(2);
    let (mut out, mut buffer) = (Vec::new(), [0u8; 4096]);
    while out.len() < n && Instant::now() < until {
        match file.read(&mut buffer) {
            Ok(0) => break,
            Ok(k) => out.extend_from_slice(&buffer[..k]),
            Err(e) if e.kind() == ErrorKind::WouldBlock => std::thread::sleep(Duration::from_millis(1)),
            Err(e) => panic!("{e}"),
        }
    }
    out
}

#[test]
fn every_byte_passes_unchanged_in_both_directions_and_nothing_echoes() {
    let dir = tempfile::tempdir().unwrap();
    let link = dir.path().join("pan-1");
    let mut pty = Pty::open(&link).unwrap();
    let mut reader = open(&link);
    let every: Vec<u8> = (0..=255).collect();
    pty.write(&every).unwrap();
    pty.write(b"+   23.4571 g  S\r\n").unwrap();
    let mut want = every.clone();
    want.extend_from_slice(b"+   23.4571 g  S\r\n");
    assert_eq!(read(&mut reader, want.len()), want);
    assert_eq!((pty.counts().bytes, pty.counts().lines), (want.len() as u64, 2), "0x0A among all bytes, and one line end");
    assert!(pty.read_sent(Duration::from_millis(50)).unwrap().is_empty(), "an echo");

    reader.write_all(&every).unwrap();
    let mut sent = Vec::new();
    while sent.len() < every.len() {
        let more = pty.read_sent(Duration::from_secs(2)).unwrap();
        assert!(!more.is_empty(), "only {} bytes came", sent.len());
        sent.extend(more);
    }
    assert_eq!(sent, every);
}

#[test]
fn bytes_wait_for_a_reader_that_opens_late() {
    let dir = tempfile::tempdir().unwrap();
    let link = dir.path().join("pan-1");
    let mut pty = Pty::open(&link).unwrap();
    pty.write(b"early\r\n").unwrap();
    assert!(!pty.drained(Duration::from_millis(20)).unwrap(), "drained before anybody read");
    assert_eq!(read(&mut open(&link), 7), b"early\r\n");
    assert!(pty.drained(Duration::from_secs(1)).unwrap());
}

#[test]
fn a_link_is_replaced_in_one_step_and_the_old_owner_leaves_the_new_one_alone() {
    let dir = tempfile::tempdir().unwrap();
    let link = dir.path().join("pan-1");
    let first = Pty::open(&link).unwrap();
    let done = AtomicBool::new(false);
    std::thread::scope(|scope| {
        let watcher = scope.spawn(|| {
            let (mut looks, mut missing) = (0u32, 0u32);
            while !done.load(Ordering::Relaxed) {
                looks += 1;
                missing += u32::from(std::fs::read_link(&link).is_err());
            }
            (looks, missing)
        });
        let mut owner = first;
        for _ in 0..200 {
            let next = Pty::open(&link).unwrap();
            assert_ne!(next.device(), owner.device());
            owner = next;
        }
        done.store(true, Ordering::Relaxed);
        let (looks, missing) = watcher.join().unwrap();
        assert!(looks > 200, "the watcher hardly looked");
        assert_eq!(missing, 0, "of {looks} looks");
        assert_eq!(std::fs::read_link(&link).unwrap(), owner.device().unwrap());
    });
    assert!(std::fs::symlink_metadata(&link).is_err(), "the last owner takes its link away");
    assert_eq!(std::fs::read_dir(dir.path()).unwrap().count(), 0, "something was left behind");
}

#[test]
fn a_file_in_the_way_is_refused_and_kept() {
    let dir = tempfile::tempdir().unwrap();
    let file = dir.path().join("notes");
    std::fs::write(&file, "mine").unwrap();
    let error = Pty::open(&file).err().unwrap();
    assert!(matches!(error, PtyError::InTheWay(_)));
    assert!(error.to_string().contains("choose another folder"));
    assert_eq!(std::fs::read_to_string(&file).unwrap(), "mine");
    let missing = Pty::open(&dir.path().join("no/such/folder/pan")).err().unwrap();
    assert!(matches!(missing, PtyError::Link { .. }), "{missing}");
}

#[test]
fn unplugging_hangs_the_reader_up_and_replugging_comes_back_under_the_same_link() {
    let dir = tempfile::tempdir().unwrap();
    let link = dir.path().join("cup-1");
    let mut pty = Pty::open(&link).unwrap();
    let mut reader = open(&link);
    pty.write(b"DROP 1\r\n").unwrap();
    assert_eq!(read(&mut reader, 8), b"DROP 1\r\n");
    let mut buffer = [0u8; 8];
    assert_eq!(reader.read(&mut buffer).unwrap_err().kind(), ErrorKind::WouldBlock, "control: silence is not a hang-up");

    pty.unplug();
    match reader.read(&mut buffer) {
        Ok(n) => assert_eq!(n, 0),
        Err(e) => assert_eq!(e.raw_os_error(), Some(nix::Error::EIO as i32)),
    }
    assert!(std::fs::symlink_metadata(&link).is_err(), "the link outlived the device");
    assert!(matches!(pty.write(b"x"), Err(PtyError::Unplugged(_))));
    assert!(matches!(pty.read_sent(Duration::ZERO), Err(PtyError::Unplugged(_))));
    assert_eq!((pty.counts().bytes, pty.counts_ever().bytes, pty.device()), (0, 8, None));

    pty.replug().unwrap();
    let mut again = open(&link);
    pty.write(b"DROP 2\r\n").unwrap();
    assert_eq!(read(&mut again, 8), b"DROP 2\r\n");
    assert_eq!((pty.counts().bytes, pty.counts_ever().bytes, pty.counts_ever().lines), (8, 16, 2));
}

#[test]
fn a_write_that_nobody_reads_ends_in_time_and_counts_what_was_accepted() {
    let dir = tempfile::tempdir().unwrap();
    let link = dir.path().join("pan-1");
    let mut pty = Pty::open(&link).unwrap();
    pty.set_write_timeout(Duration::from_millis(100));
    let began = Instant::now();
    let error = pty.write(&vec![b'x'; 1_000_000]).unwrap_err();
    assert!(matches!(error, PtyError::NobodyReads { .. }), "{error}");
    assert!((100..2_000).contains(&began.elapsed().as_millis()), "{:?}", began.elapsed());
    let accepted = pty.counts().bytes as usize;
    assert!((1_000..200_000).contains(&accepted), "{accepted}");
    assert_eq!(read(&mut open(&link), accepted).len(), accepted);
}

#[test]
fn a_stream_that_nobody_reads_loses_the_oldest_and_goes_on() {
    let dir = tempfile::tempdir().unwrap();
    let link = dir.path().join("pan-1");
    let mut pty = Pty::open(&link).unwrap();
    let mut lost = 0;
    for n in 0..20_000 {
        lost += u32::from(pty.write_or_lose(format!("{n:08}\r\n").as_bytes()).unwrap());
    }
    assert!(lost > 0, "200 kB fitted into the buffer");
    pty.write_or_lose(b"the latest\r\n").unwrap();
    let mut reader = open(&link);
    let mut got = read(&mut reader, 1);
    while !got.ends_with(b"the latest\r\n") {
        let more = read(&mut reader, 1);
        assert!(!more.is_empty(), "the latest line was lost too");
        got.extend(more);
    }
    assert!(got.len() < 200_000);
}
