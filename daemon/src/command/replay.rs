//! `tarecup replay`: plays a recording through the whole program, in the time
//! of the recording.

use super::{FAILED, LogForm, WRONG_INPUT, start_log, tell};
use crate::asks;
use crate::desk::inbox::Incoming;
use crate::desk::{Desk, Effects, limits_payload};
use crate::ledger::OpenOptions;
use crate::recording::{Event, Recording, What};
use serde_json::{Value, json};
use std::path::{Path, PathBuf};
use std::sync::mpsc::channel;
use std::time::Duration;
use tarecup_core::fact::{Fact, Recorded};
use tarecup_core::limits::Limits;
use tarecup_core::stamp::{SECOND_US, Stamp};
use tarecup_drivers::heard::{Batch, InstrumentId, PortState};
use tarecup_drivers::intake::Intake;
use tarecup_drivers::port::serial;

/// After the last event, what is due within this time still comes.
const TAIL_US: i64 = 10 * SECOND_US;
/// The file of what a folder should lead to.
const EXPECTED: &str = "expected.ndjson";

/// Arguments of `replay`.
#[derive(clap::Args)]
pub struct ReplayArgs {
    /// Folder of the recording, as `run --record` makes it.
    #[arg(value_name = "DIR")]
    folder: PathBuf,
    /// Print facts, answers, results and the instruments' counters as lines of JSON.
    #[arg(long)]
    json: bool,
    /// Compare with the folder's expected.ndjson; exit code 1 when something is different.
    #[arg(long)]
    check: bool,
    /// State directory to play into: a copy of the ledger that the recording began with. Default: an empty one that is removed.
    #[arg(long, value_name = "DIR")]
    state: Option<PathBuf>,
}

/// Runs `replay`.
pub fn run(args: &ReplayArgs, log: Option<LogForm>) -> u8 {
    start_log(log, "error");
    let wrong = |says: String| {
        eprintln!("{says}");
        WRONG_INPUT
    };
    let recording = match Recording::read(&args.folder) {
        Ok(recording) => recording,
        Err(e) => return wrong(e.to_string()),
    };
    let expected = args.folder.join(EXPECTED);
    let expected = match args.check.then(|| std::fs::read_to_string(&expected)) {
        Some(Err(e)) => return wrong(format!("{}: {e}; make it with: tarecup replay DIR --json", expected.display())),
        Some(Ok(text)) => Some(text),
        None => None,
    };
    if recording.lost > 0 {
        eprintln!("{} reads could not be kept when this was recorded; what follows may differ from what was", recording.lost);
    }
    match played_in(&recording, args.state.as_deref()) {
        Err(says) => {
            eprintln!("{says}");
            FAILED
        }
        Ok(played) => match expected {
            Some(expected) => compare(&played.lines(), &expected),
            None => {
                played.print(args.json);
                0
            }
        },
    }
}

fn compare(lines: &[String], expected: &str) -> u8 {
    let expected: Vec<&str> = expected.lines().collect();
    let first = (0..lines.len().max(expected.len())).find(|&n| lines.get(n).map(String::as_str) != expected.get(n).copied());
    let Some(n) = first else {
        say!("as expected: {} lines", lines.len());
        return 0;
    };
    let line = |text: Option<&str>| text.unwrap_or("(nothing more)").to_owned();
    eprintln!(
        "line {} is different\n  expected {}\n  played   {}",
        n + 1,
        line(expected.get(n).copied()),
        line(lines.get(n).map(String::as_str))
    );
    FAILED
}

/// What came of a recording.
struct Played {
    told: Vec<Told>,
    instruments: Vec<Value>,
    results: Vec<(Limits, u32, Recorded)>,
}

enum Told {
    Fact(Box<Recorded>),
    Answer(Value),
}

impl Played {
    fn lines(&self) -> Vec<String> {
        let told = self.told.iter().map(|t| match t {
            Told::Fact(r) => {
                // Which input a fact has seen, and the numbers of clocks, belong to this playing and not to the recording.
                json!({"seq": r.seq, "at": r.at.rfc3339(), "who": r.who, "fact": r.fact}).to_string()
            }
            Told::Answer(answer) => json!({"answer": answer}).to_string(),
        });
        let results = self.results.iter().map(|(limits, revision, r)| {
            json!({"limits": limits_payload(limits, *revision, r.seq, Some(r.at.rfc3339()), &[], Value::Null)}).to_string()
        });
        let instruments = self.instruments.iter().map(|i| json!({"instrument": i}).to_string());
        told.chain(results).chain(instruments).collect()
    }

    fn print(&self, as_json: bool) {
        if as_json {
            return self.lines().iter().for_each(|line| say!("{line}"));
        }
        for told in &self.told {
            match told {
                Told::Fact(recorded) => tell::line(recorded).into_iter().for_each(|line| say!("{line}")),
                Told::Answer(answer) if answer["ok"] == false => say!("         refused: {}", answer["error"]["says"]),
                Told::Answer(_) => (),
            }
        }
        for i in &self.instruments {
            say!("{}: {}, {} lines, not understood: {}", i["instrument"], i["state"], i["lines"], i["rejects"]);
        }
        let results: Vec<Limits> = self.results.iter().map(|(l, ..)| l.clone()).collect();
        say!("{}", tell::table(&results).trim_end());
    }
}

fn played_in(recording: &Recording, state: Option<&Path>) -> Result<Played, String> {
    let own = if state.is_none() { Some(TempFolder::make()?) } else { None };
    let folder = state.or(own.as_ref().map(|o| o.0.as_path())).unwrap_or(Path::new("."));
    Player::open(recording, folder)?.play()
}

/// A folder that is removed when the playing ends.
struct TempFolder(PathBuf);

impl TempFolder {
    fn make() -> Result<Self, String> {
        use std::os::unix::fs::DirBuilderExt;
        let mut random = [0u8; 8];
        getrandom::fill(&mut random).map_err(|e| e.to_string())?;
        let path = std::env::temp_dir().join(format!("tarecup-replay-{:016x}", u64::from_ne_bytes(random)));
        let made = std::fs::DirBuilder::new().mode(0o700).create(&path);
        made.map_err(|e| format!("{}: {e}; name a folder with --state DIR", path.display()))?;
        Ok(Self(path))
    }
}

impl Drop for TempFolder {
    fn drop(&mut self) {
        let _ = std::fs::remove_dir_all(&self.0);
    }
}

/// Bytes of one port on their way to frames, as the port's task has them.
struct Way {
    intake: Intake,
    begun: Option<i64>,
    unended_us: i64,
}

struct Player<'r> {
    recording: &'r Recording,
    desk: Desk,
    ways: Vec<Way>,
    now: Stamp,
    t: i64,
    played: Played,
}

impl<'r> Player<'r> {
    fn open(recording: &'r Recording, folder: &Path) -> Result<Self, String> {
        let options = OpenOptions::new("replay", recording.began_utc_us);
        let stamp = |boot| recording.stamp(0, boot);
        let (desk, effects) = Desk::open(folder, options, recording.desk_setup(folder)?, stamp).map_err(|e| e.to_string())?;
        let ways = recording.profiles.iter().zip(&recording.ports).enumerate().map(|(id, (profile, port))| Way {
            intake: Intake::new(id as InstrumentId, profile),
            begun: None,
            unended_us: micros(serial::unended(port, profile)),
        });
        let played = Played { told: Vec::new(), instruments: Vec::new(), results: Vec::new() };
        let now = stamp(desk.boot());
        let mut player = Self { recording, ways: ways.collect(), now, t: 0, played, desk };
        player.note(effects);
        Ok(player)
    }

    fn play(mut self) -> Result<Played, String> {
        for event in &self.recording.events {
            self.wait(event.t)?;
            self.happen(event)?;
        }
        self.wait(self.t.saturating_add(TAIL_US))?;
        let status = self.ask("replay", r#"{"ask":"status"}"#)?;
        self.played.instruments = status["status"]["instruments"].as_array().cloned().unwrap_or_default();
        for instrument in self.played.instruments.iter_mut().filter_map(Value::as_object_mut) {
            // Where facts stand and when lines came is told above.
            ["v", "seq", "at"].iter().for_each(|k| drop(instrument.remove(*k)));
        }
        self.step(Incoming::Stop)?;
        Ok(self.played)
    }

    /// Lets time pass; what is due comes when it is due.
    fn wait(&mut self, until: i64) -> Result<(), String> {
        loop {
            let desk = self.desk.due_in_us(&self.now).map(|us| self.t + us + 1_000);
            let line = self.ways.iter().enumerate().filter_map(|(id, w)| Some((w.begun? + w.unended_us, id))).min();
            let next = desk.into_iter().chain(line.map(|(t, _)| t)).min().filter(|t| *t <= until);
            let Some(next) = next else { break };
            self.set(next);
            match line.filter(|(t, _)| *t <= next) {
                Some((_, id)) => {
                    self.ways[id].begun = None;
                    let batch = self.ways[id].intake.stalled(self.now);
                    self.hear(batch)?;
                }
                None => self.step_with(Vec::new())?,
            }
        }
        self.set(until);
        Ok(())
    }

    fn set(&mut self, t: i64) {
        self.t = self.t.max(t);
        self.now = self.recording.stamp(self.t, self.desk.boot());
    }

    fn happen(&mut self, event: &Event) -> Result<(), String> {
        match &event.what {
            What::Said(id, bytes, quiet) => {
                let (now, t) = (self.now, self.t);
                let way = &mut self.ways[usize::from(*id)];
                if let Some(quiet) = quiet {
                    way.intake.opened(*quiet);
                }
                let batch = way.intake.read(bytes, now, None);
                way.begun = match (way.intake.in_frame(), batch.is_some()) {
                    (false, _) => None,
                    (true, true) => Some(t),
                    (true, false) => way.begun.or(Some(t)),
                };
                self.hear(batch)
            }
            What::Port(id, state) => {
                let way = &mut self.ways[usize::from(*id)];
                way.begun = None;
                let half = if *state == PortState::Opened { None } else { way.intake.lost(self.now) };
                self.hear(half)?;
                self.step(Incoming::Port { instrument: *id, state: state.clone(), at: self.now })
            }
            What::Ask(client, body) => {
                let answer = self.ask(client, body)?;
                self.played.told.push(Told::Answer(answer));
                Ok(())
            }
        }
    }

    fn hear(&mut self, batch: Option<Batch>) -> Result<(), String> {
        batch.map_or(Ok(()), |batch| self.step(Incoming::Batch(batch)))
    }

    fn ask(&mut self, client: &str, body: &str) -> Result<Value, String> {
        let (tx, rx) = channel();
        let reply = Box::new(move |answer| drop(tx.send(answer)));
        self.step(Incoming::Ask { client: client.into(), body: body.into(), reply })?;
        let answer = rx.try_recv().unwrap_or_else(|_| asks::refusal("no answer came"));
        serde_json::from_str(&answer).map_err(|e| e.to_string())
    }

    fn step(&mut self, item: Incoming) -> Result<(), String> {
        self.step_with(vec![item])
    }

    fn step_with(&mut self, mut items: Vec<Incoming>) -> Result<(), String> {
        let mut effects = Effects::default();
        self.desk.step(&mut items, &self.now, &mut effects);
        self.note(effects);
        match self.desk.not_recording() {
            Some(why) => Err(format!("nothing can be recorded: {why}")),
            None => Ok(()),
        }
    }

    fn note(&mut self, effects: Effects) {
        effects.replies.into_iter().for_each(|(reply, answer)| reply(answer));
        for recorded in effects.recorded {
            match &recorded.fact {
                // The playing's own start and stop are not what was recorded.
                Fact::ServiceStarted { .. } | Fact::ServiceStopped {} | Fact::SettingsTaken { .. } => continue,
                Fact::LimitsComputed { limits, revision, .. } => {
                    self.played.results.retain(|(l, ..)| l.specimen != limits.specimen);
                    self.played.results.push(((**limits).clone(), *revision, recorded.clone()));
                }
                _ => (),
            }
            self.played.told.push(Told::Fact(Box::new(recorded)));
        }
    }
}

fn micros(time: Duration) -> i64 {
    i64::try_from(time.as_micros()).unwrap_or(i64::MAX)
}
