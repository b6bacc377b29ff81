-- The first schema. Rules of this folder: a file is never changed once released (its SHA-256 stands in
-- schema_migrations and is compared at every start); a later change is a new file with the next number.
--
-- Dates are ISO text, instants UTC microseconds, prices decimal text, digests SHA-256 in lower-case hex.
-- Keys are natural keys or digests, never the order of commits. Everything but snapshots only grows;
-- triggers hold that against anyone who opens the file by hand.

-- One delivery of closes. rows: how many of its closes were new.
CREATE TABLE batches (
  digest       TEXT    NOT NULL PRIMARY KEY CHECK (length(digest) = 64 AND digest NOT GLOB '*[^0-9a-f]*'),
  source       TEXT    NOT NULL,
  taken_at_us  INTEGER NOT NULL,
  rows         INTEGER NOT NULL CHECK (rows >= 0)
) STRICT, WITHOUT ROWID;

-- Every revision of every close. The key also answers "the next date on which this instrument has a
-- close" with one descent, so no other index is needed.
CREATE TABLE closes (
  instrument  TEXT    NOT NULL CHECK (length(instrument) BETWEEN 1 AND 32
                                      AND instrument NOT GLOB '*[^A-Z0-9._-]*'),
  date        TEXT    NOT NULL CHECK (date GLOB '[12][0-9][0-9][0-9]-[01][0-9]-[0-3][0-9]'),
  revision    INTEGER NOT NULL CHECK (revision BETWEEN 0 AND 999999),
  close       TEXT    NOT NULL CHECK (close GLOB '[0-9]*' AND close NOT GLOB '*[^0-9.]*'
                                      AND close NOT GLOB '*.*.*' AND close GLOB '*[1-9]*'),
  dividend    TEXT             CHECK (dividend GLOB '[0-9]*' AND dividend NOT GLOB '*[^0-9.]*'
                                      AND dividend NOT GLOB '*.*.*' AND dividend GLOB '*[1-9]*'),
  split       TEXT             CHECK (split GLOB '[0-9]*' AND split NOT GLOB '*[^0-9.]*'
                                      AND split NOT GLOB '*.*.*' AND split GLOB '*[1-9]*'),
  batch       TEXT    NOT NULL REFERENCES batches (digest),
  PRIMARY KEY (instrument, date, revision)
) STRICT, WITHOUT ROWID;

-- The hash-chained list of everything that happened to a book. Its rows are large (a night's whole
-- evidence), so this is an ordinary table: a row's bytes would crowd the inner pages of a keyed one.
CREATE TABLE journal (
  book           TEXT    NOT NULL CHECK (length(book) BETWEEN 1 AND 200 AND instr(book, char(10)) = 0),
  seq            INTEGER NOT NULL CHECK (seq > 0),
  kind           TEXT    NOT NULL CHECK (length(kind) BETWEEN 1 AND 64 AND kind NOT GLOB '*[^a-z0-9_-]*'),
  bytes          TEXT    NOT NULL,
  previous_hash  TEXT    NOT NULL CHECK (length(previous_hash) = 64 AND previous_hash NOT GLOB '*[^0-9a-f]*'),
  hash           TEXT    NOT NULL CHECK (length(hash) = 64 AND hash NOT GLOB '*[^0-9a-f]*'),
  PRIMARY KEY (book, seq)
) STRICT;

-- The newest entry of a kind: settings are few among many nights.
CREATE INDEX journal_by_kind ON journal (book, kind, seq);

-- Which journal entry is the night of a date.
CREATE TABLE nights (
  book     TEXT    NOT NULL,
  date     TEXT    NOT NULL CHECK (date GLOB '[12][0-9][0-9][0-9]-[01][0-9]-[0-3][0-9]'),
  seq      INTEGER NOT NULL,
  verdict  TEXT    NOT NULL CHECK (verdict IN ('move', 'stay', 'withheld')),
  PRIMARY KEY (book, date),
  FOREIGN KEY (book, seq) REFERENCES journal (book, seq)
) STRICT, WITHOUT ROWID;

-- The batches that a night's closes came in.
CREATE TABLE night_batches (
  book   TEXT NOT NULL,
  date   TEXT NOT NULL,
  batch  TEXT NOT NULL REFERENCES batches (digest),
  PRIMARY KEY (book, date, batch),
  FOREIGN KEY (book, date) REFERENCES nights (book, date)
) STRICT, WITHOUT ROWID;

-- The state that a book resumes from; sha256 is over all the other columns.
CREATE TABLE snapshots (
  book         TEXT NOT NULL,
  date         TEXT NOT NULL,
  desk         TEXT NOT NULL,
  strategy     BLOB NOT NULL,
  covariation  BLOB NOT NULL,
  sha256       TEXT NOT NULL CHECK (length(sha256) = 64 AND sha256 NOT GLOB '*[^0-9a-f]*'),
  PRIMARY KEY (book, date),
  FOREIGN KEY (book, date) REFERENCES nights (book, date)
) STRICT;

CREATE TRIGGER journal_follows_its_head BEFORE INSERT ON journal
WHEN NEW.seq <> 1 + coalesce((SELECT max(seq) FROM journal WHERE book = NEW.book), 0)
  OR NEW.previous_hash <> coalesce((SELECT hash FROM journal WHERE book = NEW.book ORDER BY seq DESC LIMIT 1),
                                   '0000000000000000000000000000000000000000000000000000000000000000')
BEGIN
  SELECT RAISE(ABORT, 'the journal entry does not follow the head of its book');
END;

CREATE TRIGGER nights_go_forward BEFORE INSERT ON nights
WHEN NEW.date <= (SELECT max(date) FROM nights WHERE book = NEW.book)
BEGIN
  SELECT RAISE(ABORT, 'the book already has this night or a later one');
END;

CREATE TRIGGER batches_keep_rows BEFORE DELETE ON batches BEGIN SELECT RAISE(ABORT, 'batches only grow'); END;
CREATE TRIGGER batches_keep_values BEFORE UPDATE ON batches BEGIN SELECT RAISE(ABORT, 'batches only grow'); END;
CREATE TRIGGER closes_keep_rows BEFORE DELETE ON closes BEGIN SELECT RAISE(ABORT, 'closes only grow'); END;
CREATE TRIGGER closes_keep_values BEFORE UPDATE ON closes BEGIN SELECT RAISE(ABORT, 'closes only grow'); END;
CREATE TRIGGER journal_keeps_rows BEFORE DELETE ON journal BEGIN SELECT RAISE(ABORT, 'a journal only grows'); END;
CREATE TRIGGER journal_keeps_values BEFORE UPDATE ON journal BEGIN SELECT RAISE(ABORT, 'a journal only grows'); END;
CREATE TRIGGER nights_keep_rows BEFORE DELETE ON nights BEGIN SELECT RAISE(ABORT, 'nights only grow'); END;
CREATE TRIGGER nights_keep_values BEFORE UPDATE ON nights BEGIN SELECT RAISE(ABORT, 'nights only grow'); END;
CREATE TRIGGER night_batches_keep_rows BEFORE DELETE ON night_batches BEGIN SELECT RAISE(ABORT, 'nights only grow'); END;
CREATE TRIGGER night_batches_keep_values BEFORE UPDATE ON night_batches BEGIN SELECT RAISE(ABORT, 'nights only grow'); END;
