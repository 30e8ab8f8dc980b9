//! The one writer.

use super::chain::{Digest, FactFields, InputDigest, InputFields, LedgerId, fact_hash};
use super::error::LedgerError;
use super::lock::{FileMark, Lock};
use super::reader::{self, Reader};
use super::room::{Reserve, Room};
use super::rows::{AnswerRow, Columns, DocumentRow, FactRow, Group, InputRow, agree, signed};
use super::schema;
use super::verify::{Place, RAW_FACT, RawFact, Stop, digest_inputs, raw_facts_after};
use rusqlite::{Connection, OpenFlags, OptionalExtension, Transaction, TransactionBehavior};
use std::collections::HashMap;
use std::path::{Path, PathBuf};
use tarecup_core::stamp::Boot;

/// Facts at the end of the chain that are checked at every opening.
const TAIL_FACTS: i64 = 64;
/// Inputs digested again for that check, so that start-up stays quick.
const TAIL_INPUTS: i64 = 200_000;
/// Bytes stored after which an idle moment is used to tidy the log.
const TIDY_BYTES: u64 = 1 << 20;

/// Takes the lock for writing and lets go of it; writes nothing.
const TRY_LOCK: &str = "BEGIN IMMEDIATE; ROLLBACK";

/// How to open a ledger.
#[derive(Clone, Debug)]
pub struct OpenOptions {
    /// The kernel's id of this start of the machine.
    pub boot_id: String,
    /// Wall time now; kept as the birth of a new ledger and the first sight of a new boot.
    pub utc_us: i64,
    /// The id a new ledger gets; random when `None`. An existing ledger keeps its own.
    pub new_id: Option<LedgerId>,
    /// The most pages (4 KiB each) the file may have. Beyond it a commit fails
    /// as it does on a full disk.
    pub max_pages: Option<u32>,
    /// Room kept back on the disk, bytes; 0 for none.
    pub reserve_bytes: u64,
}

impl OpenOptions {
    /// Opens or makes a ledger in this boot, at this time.
    pub fn new(boot_id: &str, utc_us: i64) -> Self {
        Self { boot_id: boot_id.into(), utc_us, new_id: None, max_pages: None, reserve_bytes: 0 }
    }
}

/// Where the ledger ends.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Tail {
    /// The ledger's name.
    pub id: LedgerId,
    /// Raised at every restore.
    pub epoch: u64,
    /// The number of this boot, for stamps.
    pub boot: Boot,
    /// The last input; 0 when there is none.
    pub last_input: u64,
    /// The last fact; 0 when there is none.
    pub last_seq: u64,
    /// Its hash; what the first fact will be chained to when there is none.
    pub last_hash: Digest,
}

/// Where the ledger ends after a commit.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Committed {
    /// The last input.
    pub last_input: u64,
    /// The last fact.
    pub last_seq: u64,
    /// Its hash.
    pub last_hash: Digest,
}

/// The ledger, open for writing. There is one such process at a time.
#[derive(Debug)]
pub struct Ledger {
    path: PathBuf,
    options: OpenOptions,
    lock: Lock,
    reserve: Reserve,
    tail: Tail,
    /// `None` after a failed commit, until it is reopened.
    open: Option<Open>,
}

/// What is lost, and read anew, when a commit fails.
struct Open {
    conn: Connection,
    file: Option<FileMark>,
    instruments: HashMap<String, i64>,
    /// The inputs since the last fact.
    pending: InputDigest,
    since_tidy: u64,
}

impl std::fmt::Debug for Open {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Open").field("file", &self.file).field("instruments", &self.instruments).finish_non_exhaustive()
    }
}

impl Ledger {
    /// Opens the ledger at `path` (a file, or the directory it is in), making
    /// it if there is none. Takes the lock, brings an older layout up to date,
    /// checks the end of the chain.
    pub fn open(path: &Path, options: OpenOptions) -> Result<Self, LedgerError> {
        schema::check_library()?;
        let path = schema::file_at(path);
        make_folder(&path)?;
        let lock = Lock::take(&path)?;
        let (open, tail) = Open::new(&path, &options, None)?;
        let mut reserve = Reserve::beside(&path, options.reserve_bytes);
        if let Err(e) = reserve.make() {
            tracing::warn!(error = %e, "no room can be kept back on the disk for the case that it fills");
        }
        Ok(Self { path, options, lock, reserve, tail, open: Some(open) })
    }

    /// Opens the file again after a failed commit, by the same steps as a
    /// start, without letting go of the lock. The failed commit may have
    /// landed all the same: [`Self::contains_input`] tells. May be tried as
    /// often as it takes. A reserve that was given up must be there again.
    pub fn reopen(&mut self) -> Result<Tail, LedgerError> {
        self.open = None;
        self.remake_reserve()?;
        self.open_again()
    }

    /// Gives the reserve up, when there is one, and opens the file again: there
    /// is room for what is in progress. `None` when there was no reserve.
    pub fn reopen_on_reserve(&mut self) -> Option<Result<Tail, LedgerError>> {
        self.open = None;
        self.reserve.give_up().then(|| self.open_again())
    }

    /// Keeps room back again, if it was given up.
    pub fn remake_reserve(&mut self) -> Result<(), LedgerError> {
        self.reserve.demand().map_err(|e| LedgerError::io(&self.path, &e))
    }

    /// Whether something could be stored now, without storing anything: the file is the one at its path and nobody
    /// else keeps it locked. Tells the room on its disk. After an error, [`Self::reopen`] is due.
    pub fn look(&mut self) -> Result<Option<Room>, LedgerError> {
        let Some(open) = self.open.take() else {
            return Err(LedgerError::Poisoned { path: self.path.clone() });
        };
        if open.file.is_none() || FileMark::at(&self.path) != open.file || !self.lock.still_there() {
            return Err(LedgerError::Moved { path: self.path.clone() });
        }
        let tried = open.conn.execute_batch(TRY_LOCK);
        tried.map_err(|e| LedgerError::sql(&self.path, "looking whether it can be written", &e))?;
        self.open = Some(open);
        Ok(Room::of(&self.path))
    }

    fn open_again(&mut self) -> Result<Tail, LedgerError> {
        // A ledger that is being put back may stand there before its log does. Opened like that, a new log would be
        // begun in the place of the one to come.
        let log = schema::beside(&self.path, "-wal");
        let no_log = std::fs::metadata(&log).map_or(true, |m| m.len() == 0);
        if no_log && self.path.exists() && schema::last_input_in_file(&self.path)? < self.tail.last_input {
            return Err(LedgerError::Moved { path: self.path.clone() });
        }
        if !self.lock.still_there() {
            self.lock = Lock::take(&self.path)?;
        }
        let (open, tail) = Open::new(&self.path, &self.options, Some(self.tail.id))?;
        // An earlier state of the same ledger was put in its place.
        if tail.last_input < self.tail.last_input || tail.last_seq < self.tail.last_seq {
            return Err(LedgerError::Moved { path: self.path.clone() });
        }
        self.tail = tail;
        self.open = Some(open);
        Ok(tail)
    }

    /// The ledger's file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Where the ledger ends, by the last commit that succeeded.
    pub fn tail(&self) -> Tail {
        self.tail
    }

    /// The number of the next input.
    pub fn next_input(&self) -> u64 {
        self.tail.last_input + 1
    }

    /// The number of the next fact.
    pub fn next_seq(&self) -> u64 {
        self.tail.last_seq + 1
    }

    /// Whether the input `no` is stored already.
    pub fn contains_input(&self, no: u64) -> bool {
        no <= self.tail.last_input
    }

    /// Whether a commit failed and [`Self::reopen`] is due.
    pub fn is_poisoned(&self) -> bool {
        self.open.is_none()
    }

    /// A reader of the same file.
    pub fn reader(&self) -> Result<Reader, LedgerError> {
        Reader::open(&self.path)
    }

    /// Stores the group in one transaction and returns when it is on the disk.
    ///
    /// On any error nothing of it was acknowledged, and nothing more is
    /// accepted until [`Self::reopen`] has succeeded.
    pub fn commit(&mut self, group: &Group<'_>) -> Result<Committed, LedgerError> {
        let Some(mut open) = self.open.take() else {
            return Err(LedgerError::Poisoned { path: self.path.clone() });
        };
        // On an error `open` is dropped here, which rolls back what SQLite has not yet.
        let tail = if group.is_empty() { self.tail } else { open.store(&self.path, &self.tail, group)? };
        self.tail = tail;
        self.open = Some(open);
        Ok(Committed { last_input: tail.last_input, last_seq: tail.last_seq, last_hash: tail.last_hash })
    }

    pub(super) fn path_and_connection(&mut self) -> Result<(&Path, &Connection), LedgerError> {
        match &self.open {
            Some(open) => Ok((&self.path, &open.conn)),
            None => Err(LedgerError::Poisoned { path: self.path.clone() }),
        }
    }

    /// To be called when there is nothing to do: copies the write-ahead log
    /// back into the file, so that no commit has to wait for that. Does
    /// nothing while little has been stored since the last time; never waits
    /// for readers.
    pub fn tidy(&mut self) -> Result<(), LedgerError> {
        let Some(open) = self.open.as_mut().filter(|o| o.since_tidy >= TIDY_BYTES) else { return Ok(()) };
        checkpoint(&open.conn, "PASSIVE").map_err(|e| LedgerError::sql(&self.path, "tidying its log", &e))?;
        open.since_tidy = 0;
        Ok(())
    }
}

/// A new state directory must itself survive a power cut.
fn make_folder(path: &Path) -> Result<(), LedgerError> {
    let Some(folder) = path.parent().filter(|f| !f.as_os_str().is_empty() && !f.exists()) else { return Ok(()) };
    let made = || {
        std::fs::create_dir_all(folder)?;
        folder.parent().filter(|p| !p.as_os_str().is_empty()).map_or(Ok(()), |p| std::fs::File::open(p)?.sync_all())
    };
    made().map_err(|e| LedgerError::io(folder, &e))
}

fn checkpoint(conn: &Connection, how: &str) -> rusqlite::Result<bool> {
    conn.query_row(&format!("PRAGMA wal_checkpoint({how})"), [], |row| row.get::<_, i64>(0)).map(|busy| busy == 0)
}

impl Open {
    /// With `expected`, only that ledger is opened and none is made.
    fn new(path: &Path, options: &OpenOptions, expected: Option<LedgerId>) -> Result<(Self, Tail), LedgerError> {
        let sql = |e| LedgerError::sql(path, "opening it", &e);
        let moved = || LedgerError::Moved { path: path.to_path_buf() };
        if expected.is_some() && !path.exists() {
            return Err(moved());
        }
        schema::inspect(path)?;
        let create = if expected.is_some() { OpenFlags::empty() } else { OpenFlags::SQLITE_OPEN_CREATE };
        let mut conn = schema::connect(path, OpenFlags::SQLITE_OPEN_READ_WRITE | create)?;
        let version = schema::check_made_by_us(&conn, path)?;
        if let Some(expected) = expected
            && (version == 0 || reader::identity(&conn).map_err(sql)?.0 != expected)
        {
            return Err(moved());
        }
        schema::configure_writer(&conn, path, options.max_pages)?;
        let id = options.new_id.map_or_else(|| random_id(path), Ok)?;
        schema::migrate(&mut conn, path, &schema::Birth { id, utc_us: options.utc_us })?;
        // After a failed flush the log may be readable and yet not be on the
        // disk. Copying it into the file writes and flushes it again. While a
        // reader looks on, as much as possible is copied.
        if !checkpoint(&conn, "TRUNCATE").map_err(sql)? {
            checkpoint(&conn, "PASSIVE").map_err(sql)?;
        }
        let boot = number_boot(&mut conn, options).map_err(sql)?;
        // What is read may be readable and yet be locked for writing.
        conn.execute_batch(TRY_LOCK).map_err(sql)?;
        let (tail, pending) = read_tail(&conn, boot).map_err(|stop| match stop {
            Stop::Bad(fault) => LedgerError::Chain { path: path.to_path_buf(), seq: fault.seq, why: fault.why },
            Stop::Sql(e) => sql(e),
        })?;
        let instruments = read_instruments(&conn).map_err(sql)?;
        Ok((Self { conn, file: FileMark::at(path), instruments, pending, since_tidy: 0 }, tail))
    }

    fn store(&mut self, path: &Path, tail: &Tail, group: &Group<'_>) -> Result<Tail, LedgerError> {
        let sql = |e| LedgerError::sql(path, "storing", &e);
        if self.file.is_none() || FileMark::at(path) != self.file {
            return Err(LedgerError::Moved { path: path.to_path_buf() });
        }
        check_numbers(tail, group)?;
        let tx = self.conn.transaction_with_behavior(TransactionBehavior::Immediate).map_err(sql)?;
        let mut storing =
            Storing { tx: &tx, path, instruments: &mut self.instruments, pending: &mut self.pending, tail: *tail, bytes: 0 };
        storing.inputs_and_facts(group)?;
        storing.documents(group.documents)?;
        storing.answers(group.answers).map_err(sql)?;
        storing.cursors(group.cursors)?;
        let (new_tail, bytes) = (storing.tail, storing.bytes);
        tx.commit().map_err(sql)?;
        self.since_tidy += bytes;
        Ok(new_tail)
    }
}

fn random_id(path: &Path) -> Result<LedgerId, LedgerError> {
    let mut bytes = [0; 16];
    getrandom::fill(&mut bytes).map_err(|e| LedgerError::Io { path: path.to_path_buf(), what: e.to_string() })?;
    Ok(LedgerId(bytes))
}

/// The number of this boot: the one it had, or the next.
fn number_boot(conn: &mut Connection, options: &OpenOptions) -> rusqlite::Result<Boot> {
    let known = conn.query_row("SELECT ordinal FROM boot WHERE boot_id = ?1", [&options.boot_id], |row| row.get(0)).optional()?;
    if let Some(ordinal) = known {
        return Ok(Boot(ordinal));
    }
    let tx = conn.transaction_with_behavior(TransactionBehavior::Immediate)?;
    let ordinal = tx.query_row(
        "INSERT INTO boot (ordinal, boot_id, first_utc_us)
         SELECT ifnull(max(ordinal), 0) + 1, ?1, ?2 FROM boot RETURNING ordinal",
        (&options.boot_id, options.utc_us),
        |row| row.get(0),
    )?;
    tx.commit()?;
    Ok(Boot(ordinal))
}

fn read_instruments(conn: &Connection) -> rusqlite::Result<HashMap<String, i64>> {
    conn.prepare("SELECT name, id FROM instrument")?.query_map([], |row| Ok((row.get(0)?, row.get(1)?)))?.collect()
}

/// Checks the end of the chain, and digests the inputs that no fact covers yet.
fn read_tail(conn: &Connection, boot: Boot) -> Result<(Tail, InputDigest), Stop> {
    let (id, epoch) = reader::identity(conn)?;
    let place = check_last_facts(conn, &id)?;
    let mut pending = InputDigest::new();
    let last_input = digest_inputs(conn, place.seq + 1, place.inputs_to, i64::MAX, &mut pending)?;
    let tail = Tail {
        id,
        epoch,
        boot,
        last_input: last_input.unsigned_abs(),
        last_seq: place.seq.unsigned_abs(),
        last_hash: place.hash,
    };
    Ok((tail, pending))
}

fn check_last_facts(conn: &Connection, id: &LedgerId) -> Result<Place, Stop> {
    let last = reader::last_seq(conn)?.cast_signed();
    let before = (last - TAIL_FACTS).max(0);
    let mut place = match before {
        0 => Place::start(id),
        seq => {
            let sql = format!("SELECT {RAW_FACT} FROM fact WHERE seq = ?1");
            let fact = conn.query_row(&sql, [seq], RawFact::read).optional()?;
            Place::at(seq, fact.as_ref())?
        }
    };
    let facts = raw_facts_after(conn, place.seq, TAIL_FACTS)?;
    let end = facts.last().map_or(0, |f| f.inputs_to);
    for fact in &facts {
        let next = place.check_fact(fact)?;
        if end.saturating_sub(place.inputs_to) <= TAIL_INPUTS {
            place.check_inputs(conn, fact)?;
        }
        place = next;
    }
    Ok(place)
}

/// Whether the group continues where the ledger ends. A later step would fail
/// too, but could not say as clearly what does not fit.
fn check_numbers(tail: &Tail, group: &Group<'_>) -> Result<(), LedgerError> {
    let misfit = |why| Err(LedgerError::Misfit { why });
    let mut last_input = tail.last_input;
    for input in group.inputs {
        last_input += 1;
        if input.no != last_input {
            return misfit(format!("input {} where {last_input} is next", input.no));
        }
    }
    let mut last_seq = tail.last_seq;
    for fact in group.facts {
        last_seq += 1;
        if fact.seq != last_seq {
            return misfit(format!("fact {} where {last_seq} is next", fact.seq));
        }
        if fact.through > last_input {
            return misfit(format!("fact {} rests on input {}, but {last_input} is the last", fact.seq, fact.through));
        }
        let columns =
            Columns { seq: fact.seq.cast_signed(), at: fact.at, kind: fact.kind.as_bytes(), who: fact.who.map(str::as_bytes) };
        agree(&columns, fact.body).map_err(|why| LedgerError::Misfit { why: format!("fact {}: {why}", fact.seq) })?;
    }
    match group.documents.iter().find(|d| d.seq > last_seq) {
        Some(d) => misfit(format!("{} {} reflects fact {}, but {last_seq} is the last", d.kind, d.id, d.seq)),
        None => Ok(()),
    }
}

/// A group on its way through its transaction.
struct Storing<'t> {
    tx: &'t Transaction<'t>,
    path: &'t Path,
    instruments: &'t mut HashMap<String, i64>,
    pending: &'t mut InputDigest,
    tail: Tail,
    bytes: u64,
}

/// `OR FAIL` for the reason given at the trigger.
const INSERT_INPUT: &str = "INSERT OR FAIL INTO input (no, at_utc_us, mono_us, boot, kind, instrument, bytes, reason)
     VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8)";
const INSERT_FACT: &str = "INSERT INTO fact
     (seq, at_utc_us, mono_us, boot, kind, who, through, inputs_to, body, inputs_digest, hash)
     VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11)";
const UPSERT_DOCUMENT: &str = "INSERT INTO document (kind, id, seq, open, body) VALUES (?1, ?2, ?3, ?4, ?5)
     ON CONFLICT (kind, id) DO UPDATE SET seq = excluded.seq, open = excluded.open, body = excluded.body
     WHERE excluded.seq >= document.seq";

impl Storing<'_> {
    fn failed(&self, error: &rusqlite::Error) -> LedgerError {
        LedgerError::sql(self.path, "storing", error)
    }

    /// A fact is chained to all inputs up to the one it rests on, and at least
    /// to those stored before; so the grouping, which depends on the disk's
    /// speed, has no part in the chain as long as a fact rests on the input
    /// that made it.
    fn inputs_and_facts(&mut self, group: &Group<'_>) -> Result<(), LedgerError> {
        let first = self.tail.last_input + 1;
        let mut left = group.inputs;
        for fact in group.facts {
            let due = (fact.through + 1).saturating_sub(first) as usize;
            let done = group.inputs.len() - left.len();
            let (now, later) = left.split_at(due.saturating_sub(done).min(left.len()));
            self.inputs(now).map_err(|e| self.failed(&e))?;
            left = later;
            self.fact(fact).map_err(|e| self.failed(&e))?;
        }
        self.inputs(left).map_err(|e| self.failed(&e))
    }

    fn inputs(&mut self, rows: &[InputRow<'_>]) -> rusqlite::Result<()> {
        if rows.is_empty() {
            return Ok(());
        }
        let mut insert = self.tx.prepare_cached(INSERT_INPUT)?;
        for row in rows {
            let no = row.no.cast_signed();
            let instrument = row.instrument.map(|name| self.number_of(name)).transpose()?;
            let (at, boot, kind) = (row.at, i64::from(row.at.boot.0), row.kind.word());
            insert.execute((no, at.utc_us, at.mono_us, boot, kind, instrument, row.bytes, row.reason))?;
            self.pending.add(&InputFields {
                no,
                utc_us: at.utc_us,
                mono_us: at.mono_us,
                boot,
                kind: kind.as_bytes(),
                instrument: row.instrument.map(str::as_bytes),
                reason: row.reason.map(str::as_bytes),
                bytes: row.bytes,
            });
            self.tail.last_input = row.no;
            self.bytes += row.bytes.len() as u64 + 40;
        }
        Ok(())
    }

    /// The number an instrument's name is stored under.
    fn number_of(&mut self, name: &str) -> rusqlite::Result<i64> {
        if let Some(id) = self.instruments.get(name) {
            return Ok(*id);
        }
        let id = self.tx.query_row("INSERT INTO instrument (name) VALUES (?1) RETURNING id", [name], |row| row.get(0))?;
        self.instruments.insert(name.into(), id);
        Ok(id)
    }

    fn fact(&mut self, row: &FactRow<'_>) -> rusqlite::Result<()> {
        let inputs = self.pending.take();
        let fields = FactFields {
            seq: row.seq.cast_signed(),
            utc_us: row.at.utc_us,
            mono_us: row.at.mono_us,
            boot: i64::from(row.at.boot.0),
            kind: row.kind.as_bytes(),
            who: row.who.map(str::as_bytes),
            through: row.through.cast_signed(),
            inputs_to: self.tail.last_input.cast_signed(),
            body: row.body,
        };
        let hash = fact_hash(&self.tail.last_hash, &fields, &inputs);
        let f = &fields;
        self.tx.prepare_cached(INSERT_FACT)?.execute(rusqlite::params![
            f.seq,
            f.utc_us,
            f.mono_us,
            f.boot,
            row.kind,
            row.who,
            f.through,
            f.inputs_to,
            row.body,
            inputs.0,
            hash.0
        ])?;
        self.tail.last_seq = row.seq;
        self.tail.last_hash = hash;
        self.bytes += row.body.len() as u64 + 160;
        Ok(())
    }

    fn documents(&mut self, rows: &[DocumentRow<'_>]) -> Result<(), LedgerError> {
        for row in rows {
            let put = || {
                let mut statement = self.tx.prepare_cached(UPSERT_DOCUMENT)?;
                statement.execute((row.kind, row.id, row.seq.cast_signed(), row.open, row.body))
            };
            if put().map_err(|e| self.failed(&e))? == 0 {
                let why = format!("{} {} at fact {} would go back in time", row.kind, row.id, row.seq);
                return Err(LedgerError::Misfit { why });
            }
            self.bytes += row.body.len() as u64 + 80;
        }
        Ok(())
    }

    fn answers(&mut self, rows: &[AnswerRow<'_>]) -> rusqlite::Result<()> {
        for row in rows {
            let mut insert =
                self.tx.prepare_cached("INSERT INTO answer (client, ask_id, body_digest, answer) VALUES (?1, ?2, ?3, ?4)")?;
            insert.execute((row.client, row.ask_id, row.body_digest.0, row.answer))?;
            self.bytes += row.answer.len() as u64 + 120;
        }
        Ok(())
    }

    fn cursors(&mut self, rows: &[(&str, u64)]) -> Result<(), LedgerError> {
        for (name, value) in rows {
            let value = signed(*value, name)?;
            let put = || {
                let sql = "INSERT INTO cursor (name, value) VALUES (?1, ?2)
                           ON CONFLICT (name) DO UPDATE SET value = excluded.value";
                self.tx.prepare_cached(sql)?.execute((name, value))
            };
            put().map_err(|e| self.failed(&e))?;
            self.bytes += 40;
        }
        Ok(())
    }
}
