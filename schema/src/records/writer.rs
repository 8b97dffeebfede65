//! Writing: acts, and the rows that belong to them.
//!
//! Invariants: every row that the trail covers is written here, and its digest is taken from the very values written;
//! an act commits with its trail row or not at all; rows of a filing that is not published are seen by nobody and are
//! cleared at the next start.

use rusqlite::{OptionalExtension, params, params_from_iter, types::Value};
use serde_json::Value as Json;
use sha2::{Digest, Sha256};

use super::codec::{Canon, Hash, Table, table};
use super::error::{RecordsError, Result};
use super::open::Records;
use super::texts::{SessionFact, next_id};
use super::trail::{ActKind, ActNumber, Doer, TrailRow, write_moment};

/// A value of a row.
#[derive(Debug, Clone, Copy)]
pub enum Cell<'a> {
    /// NULL
    Null,
    /// An integer.
    Int(i64),
    /// A text.
    Text(&'a str),
    /// Bytes.
    Bytes(&'a [u8]),
    /// A term, by its text.
    Term(&'a str),
    /// A subject, by its code.
    Subject(&'a str),
}

impl<'a> Cell<'a> {
    /// A text or NULL.
    pub fn text_or_null(text: Option<&'a str>) -> Self {
        text.map_or(Self::Null, Self::Text)
    }

    /// An integer or NULL.
    pub fn int_or_null(value: Option<i64>) -> Self {
        value.map_or(Self::Null, Self::Int)
    }
}

/// An act in the making: rows may be added until it ends.
pub struct Act<'r> {
    records: &'r mut Records,
    number: ActNumber,
    /// What it is done to: ids and codes, never values of readings.
    pub objects: serde_json::Map<String, Json>,
    /// How it was.
    pub before: Option<Json>,
    /// How it is.
    pub after: Option<Json>,
    rows: Vec<(usize, i64, Hash)>,
}

impl Records {
    /// Does one act in one transaction.
    pub fn act<T>(&mut self, kind: ActKind, doer: &Doer, work: impl FnOnce(&mut Act<'_>) -> Result<T>) -> Result<T> {
        self.begin()?;
        let done = self.act_within(kind, doer, work);
        match done {
            Ok(value) => self.commit().map(|()| value),
            Err(error) => {
                self.roll_back();
                Err(error)
            }
        }
    }

    /// Opens a transaction that writes.
    pub fn begin(&mut self) -> Result<()> {
        let failed = self.failed("starting to write");
        self.conn.execute_batch("BEGIN IMMEDIATE").map_err(failed)
    }

    /// Commits it.
    pub fn commit(&mut self) -> Result<()> {
        let failed = self.failed("committing");
        let done = self.conn.execute_batch("COMMIT").map_err(failed);
        if done.is_err() {
            self.roll_back();
        }
        done
    }

    /// Gives it up.
    pub fn roll_back(&mut self) {
        self.texts.forget();
        if !self.conn.is_autocommit() {
            // A failed roll-back leaves nothing to do: the connection's next act reports what is wrong.
            let _ = self.conn.execute_batch("ROLLBACK");
        }
    }

    /// Does one act inside the transaction that is open. On failure only this act is undone, unless its filing was
    /// staged, in which case the whole transaction is given up.
    pub fn act_within<T>(
        &mut self,
        kind: ActKind,
        doer: &Doer,
        work: impl FnOnce(&mut Act<'_>) -> Result<T>,
    ) -> Result<T> {
        let failed = self.failed("writing an act");
        if self.conn.is_autocommit() {
            // SQLite gives up the whole transaction itself on a full or failing disk. A savepoint would open a new one
            // and commit this act alone, while the caller believes that it stands or falls with the batch.
            return Err(RecordsError::Refused("the transaction of this act was given up after a failure".to_owned()));
        }
        self.conn.execute_batch("SAVEPOINT act").map_err(&failed)?;
        let number = self.next_act().map_err(&failed)?;
        let mut act =
            Act { records: self, number, objects: serde_json::Map::new(), before: None, after: None, rows: vec![] };
        let done = work(&mut act).and_then(|value| act.end(kind, doer).map(|()| value));
        match done {
            Ok(value) => self.conn.execute_batch("RELEASE act").map_err(&failed).map(|()| value),
            Err(error) => {
                self.texts.forget();
                let _ = self.conn.execute_batch("ROLLBACK TO act; RELEASE act");
                Err(error)
            }
        }
    }

    fn next_act(&self) -> rusqlite::Result<ActNumber> {
        self.conn.prepare_cached("SELECT coalesce(max(number), 0) + 1 FROM trail")?.query_row([], |row| row.get(0))
    }
}

impl Act<'_> {
    /// Its number on the trail.
    pub fn number(&self) -> ActNumber {
        self.number
    }

    /// The records it is done to.
    pub fn records(&mut self) -> &mut Records {
        self.records
    }

    /// Adds a row to a table of [`super::codec::OF_ACT`]; `cells` are its columns after `id` and `act`. Gives the row's number.
    pub fn add(&mut self, name: &str, cells: &[Cell<'_>]) -> Result<i64> {
        let failed = self.records.failed("writing a row");
        let Some((rank, table)) = table(name) else {
            return Err(RecordsError::Damaged(format!("no table {name}")));
        };
        debug_assert_eq!(table.columns.len(), cells.len() + 2, "columns of {name}");
        let id = next_id(&self.records.conn, name).map_err(&failed)?;
        let salt = self.records.salt_for(table);
        let digest = self.records.write_row(table, id, self.number, cells, salt).map_err(&failed)?;
        self.rows.push((rank, id, digest));
        Ok(id)
    }

    /// Writes the row of a raw copy, unless it is there.
    pub fn add_raw(&mut self, kept: &super::raw::Kept) -> Result<()> {
        let failed = self.records.failed("keeping an export");
        self.records.insert_raw(kept).map_err(failed)
    }

    /// Publishes a filing with this act.
    pub fn publish(&mut self, filing: Filing) -> Result<i64> {
        let failed = self.records.failed("publishing an export");
        let digest = filing.digest();
        let (rank, table) = table("filing").ok_or_else(|| RecordsError::Damaged("no table filing".into()))?;
        let span = filing.readings.then_span();
        let cells = [
            Cell::int_or_null(filing.capture),
            Cell::int_or_null(span.map(|span| span.0)),
            Cell::int_or_null(span.map(|span| span.1)),
            Cell::Int(filing.readings.count),
            Cell::Int(filing.holds),
            Cell::Bytes(&digest),
        ];
        let row = self.records.write_row(table, filing.id, self.number, &cells, None).map_err(&failed)?;
        self.rows.push((rank, filing.id, row));
        if filing.staged {
            self.records.conn.execute("DELETE FROM staging WHERE filing = ?1", [filing.id]).map_err(&failed)?;
        }
        Ok(filing.id)
    }

    fn end(mut self, kind: ActKind, doer: &Doer) -> Result<()> {
        let failed = self.records.failed("writing the trail");
        let previous = self.records.head_hash().map_err(&failed)?.unwrap_or([0; 32]);
        self.rows.sort_unstable_by_key(|(rank, id, _)| (*rank, *id));
        let mut hasher = Sha256::new();
        self.rows.iter().for_each(|(_, _, digest)| hasher.update(digest));
        let mut row = TrailRow {
            number: self.number,
            at: write_moment(self.records.world.now()),
            who: doer.who.clone(),
            program: doer.program.clone(),
            act: kind.code().to_owned(),
            objects: Json::Object(std::mem::take(&mut self.objects)).to_string(),
            before: self.before.take().map(|json| json.to_string()),
            after: self.after.take().map(|json| json.to_string()),
            reason: doer.why.clone(),
            digest: hasher.finalize().into(),
            previous,
            hash: [0; 32],
        };
        row.hash = row.expected_hash();
        self.records.insert_trail(&row).map_err(&failed)
    }
}

impl Records {
    fn head_hash(&self) -> rusqlite::Result<Option<Hash>> {
        self.conn
            .prepare_cached("SELECT hash FROM trail ORDER BY number DESC LIMIT 1")?
            .query_row([], |row| row.get(0))
            .optional()
    }

    fn insert_trail(&self, row: &TrailRow) -> rusqlite::Result<()> {
        self.conn
            .prepare_cached(
                "INSERT INTO trail (number, at, who, program, act, objects, before, after, reason, digest, previous, hash)
                 VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12)",
            )?
            .execute(params![
                row.number,
                row.at,
                row.who,
                row.program,
                row.act,
                row.objects,
                row.before,
                row.after,
                row.reason,
                row.digest.as_slice(),
                row.previous.as_slice(),
                row.hash.as_slice(),
            ])
            .map(|_| ())
    }

    fn salt_for(&self, table: &Table) -> Option<[u8; 16]> {
        table.salted.then(|| self.new_salt())
    }

    fn new_salt(&self) -> [u8; 16] {
        let mut salt = [0; 16];
        self.world.chance(&mut salt);
        salt
    }

    /// Writes a row whose second column is its act or filing, and gives its digest.
    fn write_row(
        &mut self,
        table: &Table,
        id: i64,
        owner: i64,
        cells: &[Cell<'_>],
        salt: Option<[u8; 16]>,
    ) -> rusqlite::Result<Hash> {
        let mut canon = Canon::default();
        canon.start(salt.as_ref().map_or(&[][..], |salt| &salt[..]));
        canon.text(table.name);
        canon.integer(id);
        canon.integer(owner);
        let mut values = vec![Value::Integer(id), Value::Integer(owner)];
        for cell in cells {
            values.push(self.put_cell(&mut canon, *cell)?);
        }
        let mut columns: Vec<String> = table.columns.iter().map(|(name, _)| format!("\"{name}\"")).collect();
        if let Some(salt) = salt {
            columns.push("salt".to_owned());
            values.push(Value::Blob(salt.to_vec()));
        }
        let marks = vec!["?"; values.len()].join(", ");
        let sql = format!("INSERT INTO {} ({}) VALUES ({marks})", table.name, columns.join(", "));
        self.conn.prepare_cached(&sql)?.execute(params_from_iter(values))?;
        Ok(canon.digest())
    }

    fn put_cell(&mut self, canon: &mut Canon, cell: Cell<'_>) -> rusqlite::Result<Value> {
        Ok(match cell {
            Cell::Null => {
                canon.null();
                Value::Null
            }
            Cell::Int(value) => {
                canon.integer(value);
                Value::Integer(value)
            }
            Cell::Text(text) => {
                canon.text(text);
                Value::Text(text.to_owned())
            }
            Cell::Bytes(bytes) => {
                canon.bytes(bytes);
                Value::Blob(bytes.to_vec())
            }
            Cell::Term(text) => {
                canon.text(text);
                Value::Integer(self.texts.term(&self.conn, text)?)
            }
            Cell::Subject(code) => {
                canon.text(code);
                Value::Integer(self.texts.subject(&self.conn, code)?)
            }
        })
    }
}

/// Counts numbered rows that follow one another.
#[derive(Debug, Default, Clone, Copy)]
struct Run {
    first: i64,
    last: i64,
    count: i64,
}

impl Run {
    fn add(&mut self, id: i64) {
        if self.count == 0 {
            self.first = id;
        }
        self.last = id;
        self.count += 1;
    }

    fn then_span(self) -> Option<(i64, i64)> {
        (self.count > 0).then_some((self.first, self.last))
    }
}

/// The readings and holds of one act in the making. Not visible before [`Act::publish`].
#[must_use = "a filing that is not published is cleared at the next start"]
pub struct Filing {
    /// Its number.
    pub id: i64,
    /// The capture it is from; `None` for readings by hand.
    pub capture: Option<i64>,
    readings: Run,
    holds: i64,
    streams: [Sha256; 4],
    canon: Canon,
    staged: bool,
}

impl Filing {
    fn digest(&self) -> Hash {
        let mut outer = Sha256::new();
        self.streams.iter().for_each(|stream| outer.update(stream.clone().finalize()));
        outer.finalize().into()
    }

    /// How many readings it holds.
    pub fn readings(&self) -> i64 {
        self.readings.count
    }

    /// How many holds it holds.
    pub fn holds(&self) -> i64 {
        self.holds
    }
}

/// A reading about to be filed. Texts instead of numbers, wherever texts are kept once.
#[derive(Debug, Clone, Copy)]
pub struct NewReading<'a> {
    /// Physical line or sheet row.
    pub line: Option<i64>,
    /// First byte and the one after the last.
    pub bytes: Option<(i64, i64)>,
    /// A workbook's cell.
    pub cell: Option<&'a str>,
    /// The instrument's code.
    pub instrument: &'a str,
    /// The measure's code.
    pub measure: &'a str,
    /// [`crate::reading::Condition`] as text.
    pub condition: &'a str,
    /// The replicate's number.
    pub replicate: u32,
    /// Whether that came from the export.
    pub labelled: bool,
    /// The subject's code.
    pub subject: &'a str,
    /// Local day, days since 0001-01-01.
    pub day: i64,
    /// The visit's label; empty for none.
    pub label: &'a str,
    /// As exported.
    pub text: &'a str,
    /// The number as exported.
    pub exported: Option<f64>,
    /// Its unit as exported; empty: the measure's.
    pub unit: &'a str,
    /// In the measure's unit.
    pub number: f64,
    /// `<` or `>`.
    pub mark: Option<&'a str>,
    /// The time as written.
    pub written: Option<&'a str>,
    /// UTC milliseconds since 1970.
    pub moment: Option<i64>,
    /// Empty when not said.
    pub operator: &'a str,
    /// The plan version that placed it.
    pub plan: i64,
    /// Hash of what identifies it.
    pub identity: Option<i64>,
    /// Its order among equals in the export.
    pub ordinal: i64,
    /// The reading whose place it takes.
    pub supersedes: Option<i64>,
    /// 0 export, 1 by hand, 2 amended.
    pub source: i64,
}

/// A hold about to be filed.
#[derive(Debug, Clone, Copy)]
pub struct NewHold<'a> {
    /// Why, as a code.
    pub reason: &'a str,
    /// `None`: the whole file.
    pub line: Option<i64>,
    /// A workbook's cell.
    pub cell: Option<&'a str>,
    /// First byte and the one after the last.
    pub bytes: Option<(i64, i64)>,
    /// Empty: the whole row.
    pub column: &'a str,
    /// The row as written, with its order among equals.
    pub row_key: &'a [u8],
    /// As exported.
    pub row: &'a str,
    /// JSON.
    pub detail: &'a str,
}

impl Records {
    /// Starts a filing inside the transaction that is open.
    pub fn new_filing(&mut self, capture: Option<i64>) -> Result<Filing> {
        let failed = self.failed("starting a filing");
        let id = self
            .conn
            .prepare_cached(
                "SELECT 1 + max((SELECT coalesce(max(id), 0) FROM filing), (SELECT coalesce(max(filing), 0) FROM staging))",
            )
            .and_then(|mut statement| statement.query_row([], |row| row.get(0)))
            .map_err(failed)?;
        Ok(Filing {
            id,
            capture,
            readings: Run::default(),
            holds: 0,
            streams: [Sha256::new(), Sha256::new(), Sha256::new(), Sha256::new()],
            canon: Canon::default(),
            staged: false,
        })
    }

    /// The number that the next capture will have.
    pub fn next_capture(&self) -> Result<i64> {
        next_id(&self.conn, "capture").map_err(self.failed("numbering an export"))
    }

    /// Commits what a large filing has so far, unpublished, and goes on in a new transaction, so that others may write
    /// in between. Must not be called inside an act: stage first, then publish with a small act.
    pub fn stage(&mut self, filing: &mut Filing) -> Result<()> {
        let failed = self.failed("staging an export");
        if !filing.staged {
            self.conn.execute("INSERT INTO staging (filing) VALUES (?1)", [filing.id]).map_err(&failed)?;
            filing.staged = true;
        }
        self.commit()?;
        self.begin()
    }

    /// Clears what filings left that were never published. Only the one intake may call this.
    pub fn clear_unpublished(&mut self) -> Result<u64> {
        let failed = self.failed("clearing an unfinished export");
        let pending: Vec<i64> = self
            .conn
            .prepare("SELECT filing FROM staging")
            .and_then(|mut statement| statement.query_map([], |row| row.get(0))?.collect())
            .map_err(&failed)?;
        for filing in &pending {
            self.clear_filing(*filing)?;
        }
        Ok(pending.len() as u64)
    }

    /// Clears one unpublished filing, in pieces small enough not to lock others out.
    pub fn clear_filing(&mut self, filing: i64) -> Result<()> {
        let failed = self.failed("clearing an unfinished export");
        for table in ["reading", "hold", "sighting", "gone"] {
            let sql = format!(
                "DELETE FROM {table} WHERE id IN (SELECT id FROM {table} WHERE filing = ?1 ORDER BY id DESC LIMIT 20000)"
            );
            while self.conn.execute(&sql, [filing]).map_err(&failed)? > 0 {}
        }
        self.conn.execute("DELETE FROM staging WHERE filing = ?1", [filing]).map_err(&failed)?;
        Ok(())
    }

    /// Adds a reading to a filing.
    pub fn add_reading(&mut self, filing: &mut Filing, new: &NewReading<'_>) -> Result<i64> {
        let stored = NewReading { exported: new.exported.map(stored_real), number: stored_real(new.number), ..*new };
        if stored.number.is_nan() || stored.exported.is_some_and(f64::is_nan) {
            return Err(RecordsError::Refused(format!("\"{}\" is no number and cannot be filed as one", new.text)));
        }
        self.write_reading(filing, &stored).map_err(|error| self.failed("filing a reading")(error))
    }

    fn write_reading(&mut self, filing: &mut Filing, new: &NewReading<'_>) -> rusqlite::Result<i64> {
        let id = next_id(&self.conn, "reading")?;
        let (conn, texts) = (&self.conn, &mut self.texts);
        let subject = texts.subject(conn, new.subject)?;
        let label = texts.term(conn, new.label)?;
        let session = texts.session(conn, SessionFact { subject, day: new.day, label })?;
        let terms = [new.instrument, new.measure, new.condition, new.unit, new.operator];
        let mut ids = [0; 5];
        for (id, text) in ids.iter_mut().zip(terms) {
            *id = texts.term(conn, text)?;
        }
        let salt = self.new_salt();
        let digest = reading_digest(&mut filing.canon, &salt, (id, filing.id, filing.capture), new);
        self.conn
            .prepare_cached(
                "INSERT INTO reading (id, filing, capture, line, byte_from, byte_to, cell, instrument, measure, condition,
                 replicate, labelled, session, text, exported, unit, number, mark, written, moment, operator, plan,
                 identity, ordinal, supersedes, source, salt)
                 VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12, ?13, ?14, ?15, ?16, ?17, ?18, ?19, ?20, ?21,
                 ?22, ?23, ?24, ?25, ?26, ?27)",
            )?
            .execute(params![
                id,
                filing.id,
                filing.capture,
                new.line,
                new.bytes.map(|span| span.0),
                new.bytes.map(|span| span.1),
                new.cell,
                ids[0],
                ids[1],
                ids[2],
                new.replicate,
                new.labelled,
                session,
                new.text,
                new.exported,
                ids[3],
                new.number,
                new.mark,
                new.written,
                new.moment,
                ids[4],
                new.plan,
                new.identity,
                new.ordinal,
                new.supersedes,
                new.source,
                salt.as_slice(),
            ])?;
        filing.readings.add(id);
        filing.streams[0].update(digest);
        Ok(id)
    }

    /// Adds a hold to a filing.
    pub fn add_hold(&mut self, filing: &mut Filing, new: &NewHold<'_>) -> Result<i64> {
        let span = new.bytes;
        let cells = [
            Cell::int_or_null(filing.capture),
            Cell::Text(new.reason),
            Cell::int_or_null(new.line),
            Cell::text_or_null(new.cell),
            Cell::int_or_null(span.map(|span| span.0)),
            Cell::int_or_null(span.map(|span| span.1)),
            Cell::Text(new.column),
            Cell::Bytes(new.row_key),
            Cell::Text(new.row),
            Cell::Text(new.detail),
        ];
        let id = self.add_to_filing("hold", filing, &cells)?;
        filing.holds += 1;
        Ok(id)
    }

    /// Notes that a held row came again.
    pub fn add_sighting(&mut self, filing: &mut Filing, hold: i64, line: Option<i64>) -> Result<i64> {
        let cells = [Cell::int_or_null(filing.capture), Cell::Int(hold), Cell::int_or_null(line)];
        self.add_to_filing("sighting", filing, &cells)
    }

    /// Notes that a reading is no longer in its source.
    pub fn add_gone(&mut self, filing: &mut Filing, reading: i64) -> Result<i64> {
        self.add_to_filing("gone", filing, &[Cell::Int(reading)])
    }

    fn add_to_filing(&mut self, name: &str, filing: &mut Filing, cells: &[Cell<'_>]) -> Result<i64> {
        let failed = self.failed("filing a row");
        let Some((rank, table)) = table(name) else {
            return Err(RecordsError::Damaged(format!("no table {name}")));
        };
        let id = next_id(&self.conn, name).map_err(&failed)?;
        let salt = self.salt_for(table);
        let digest = self.write_row(table, id, filing.id, cells, salt).map_err(&failed)?;
        filing.streams[rank].update(digest);
        Ok(id)
    }
}

/// A real as SQLite gives it back: it loses the sign of a negative zero, and a digest over it would never fit again.
fn stored_real(value: f64) -> f64 {
    if value == 0.0 { 0.0 } else { value }
}

/// The digest of a reading in the canonical form; the columns stand in the order of [`super::codec::OF_FILING`].
fn reading_digest(
    canon: &mut Canon,
    salt: &[u8; 16],
    (id, filing, capture): (i64, i64, Option<i64>),
    new: &NewReading<'_>,
) -> Hash {
    canon.start(salt);
    canon.text("reading");
    canon.integer(id);
    canon.integer(filing);
    canon.integer_or_null(capture);
    canon.integer_or_null(new.line);
    canon.integer_or_null(new.bytes.map(|span| span.0));
    canon.integer_or_null(new.bytes.map(|span| span.1));
    canon.text_or_null(new.cell);
    canon.text(new.instrument);
    canon.text(new.measure);
    canon.text(new.condition);
    canon.integer(i64::from(new.replicate));
    canon.integer(i64::from(new.labelled));
    canon.text(new.subject);
    canon.integer(new.day);
    canon.text(new.label);
    canon.text(new.text);
    canon.real_or_null(new.exported);
    canon.text(new.unit);
    canon.real(new.number);
    canon.text_or_null(new.mark);
    canon.text_or_null(new.written);
    canon.integer_or_null(new.moment);
    canon.text(new.operator);
    canon.integer(new.plan);
    canon.integer_or_null(new.identity);
    canon.integer(new.ordinal);
    canon.integer_or_null(new.supersedes);
    canon.integer(new.source);
    canon.digest()
}

/// The columns that a table's canonical rows need, for reading them back.
pub(crate) fn column_list(table: &Table) -> String {
    table.columns.iter().map(|(name, _)| format!("\"{name}\"")).collect::<Vec<_>>().join(", ")
}
