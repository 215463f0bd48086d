-- Moments are UTC, in whole microseconds since 1970 (`_us`). `body` is the JSON of the type in ebbmark-rules.

-- Protocols, medicine lists and local codes, by content: what a fact puts in force.
CREATE TABLE text (
    hash      TEXT PRIMARY KEY CHECK (length(hash) = 64),
    kind      TEXT NOT NULL CHECK (kind IN ('protocol', 'medicines', 'codes')),
    body      TEXT NOT NULL,
    stored_us INTEGER NOT NULL
) STRICT, WITHOUT ROWID;

-- One row for each look at a file that ended in an outcome; a path's last row is how it stands. `path` is relative to the export folder and may not be
-- UTF-8. `version` is the program's: a file held by an older one deserves another look.
CREATE TABLE file (
    id       INTEGER PRIMARY KEY,
    path     BLOB NOT NULL,
    size     INTEGER NOT NULL,
    mtime_ns INTEGER NOT NULL,
    ctime_ns INTEGER NOT NULL,
    inode    INTEGER NOT NULL,
    hash     TEXT CHECK (length(hash) = 64),
    outcome  TEXT NOT NULL CHECK (outcome IN ('accepted', 'repeat', 'held')),
    what     TEXT NOT NULL CHECK (what IN ('tracing', 'chart', 'unknown')),
    reason   TEXT NOT NULL,
    at_us    INTEGER NOT NULL,
    version  TEXT NOT NULL,
    CHECK ((outcome = 'held') = (reason <> '')),
    CHECK (outcome = 'held' OR hash IS NOT NULL)
) STRICT;
CREATE INDEX file_look ON file (path, size, mtime_ns, ctime_ns, inode);
CREATE UNIQUE INDEX file_content_accepted_once ON file (hash) WHERE outcome = 'accepted';
CREATE INDEX file_held ON file (at_us) WHERE outcome = 'held';

-- Rows of an accepted chart that could not be used.
CREATE TABLE bad_row (
    id    INTEGER PRIMARY KEY,
    file  INTEGER NOT NULL REFERENCES file (id),
    place TEXT NOT NULL,
    why   TEXT NOT NULL
) STRICT;
CREATE INDEX bad_row_file ON bad_row (file);

-- Everything known, in the order in which it was learned. `says` is what a row of a file says, hashed: the same row
-- sent again in a longer file is not news.
CREATE TABLE fact (
    seq         INTEGER PRIMARY KEY,
    received_us INTEGER NOT NULL,
    occurred_us INTEGER NOT NULL,
    file        INTEGER REFERENCES file (id),
    issuer      TEXT,
    number      TEXT,
    kind        TEXT NOT NULL,
    says        TEXT UNIQUE,
    body        TEXT NOT NULL CHECK (json_valid(body)),
    CHECK ((issuer IS NULL) = (number IS NULL))
) STRICT;
CREATE INDEX fact_patient ON fact (issuer, number, occurred_us);
CREATE INDEX fact_kind ON fact (kind, received_us);

-- Everything decided, in order. `fact` is the one that was being taken; none where a deadline alone decided.
CREATE TABLE decision (
    seq   INTEGER PRIMARY KEY,
    at_us INTEGER NOT NULL,
    fact  INTEGER REFERENCES fact (seq),
    alert TEXT NOT NULL REFERENCES alert (id),
    kind  TEXT NOT NULL CHECK (kind IN ('raised', 'changed', 'life', 'tell')),
    body  TEXT NOT NULL CHECK (json_valid(body))
) STRICT;
CREATE INDEX decision_alert ON decision (alert, seq);

-- Alerts as they stand: the decisions, folded.
CREATE TABLE alert (
    id        TEXT PRIMARY KEY,
    issuer    TEXT,
    number    TEXT,
    concern   TEXT NOT NULL,
    raised_us INTEGER NOT NULL,
    as_of_us  INTEGER NOT NULL,
    state     TEXT NOT NULL CHECK (state IN ('open', 'acknowledged', 'closed', 'withdrawn')),
    tier      TEXT NOT NULL,
    tier_rank INTEGER NOT NULL,
    rule      TEXT NOT NULL,
    body      TEXT NOT NULL CHECK (json_valid(body)),
    CHECK ((issuer IS NULL) = (number IS NULL))
) STRICT, WITHOUT ROWID;
CREATE UNIQUE INDEX alert_one_open ON alert (coalesce(issuer, ''), coalesce(number, ''), concern)
    WHERE state IN ('open', 'acknowledged');
CREATE INDEX alert_raised ON alert (raised_us);

-- One message in place of several that were due to one recipient at once.
CREATE TABLE digest (
    id         INTEGER PRIMARY KEY,
    message_id TEXT NOT NULL UNIQUE,
    bytes      BLOB NOT NULL,
    created_us INTEGER NOT NULL
) STRICT;
CREATE TRIGGER digest_only_grows BEFORE UPDATE ON digest BEGIN SELECT raise(ABORT, 'digests are never changed'); END;
CREATE TRIGGER digest_keeps BEFORE DELETE ON digest BEGIN SELECT raise(ABORT, 'digests are never deleted'); END;

-- One message to one recipient about one step of one alert, or (without an alert) of one day; its bytes are rendered once. `asks`: it asks for an answer,
-- so that retrying it is pointless once somebody gave one. `digest`: what goes out in its place.
CREATE TABLE outbox (
    id          INTEGER PRIMARY KEY,
    alert       TEXT REFERENCES alert (id),
    step        INTEGER NOT NULL,
    recipient   TEXT NOT NULL,
    role        TEXT NOT NULL,
    asks        INTEGER NOT NULL CHECK (asks IN (0, 1)),
    message_id  TEXT NOT NULL UNIQUE,
    bytes       BLOB NOT NULL,
    state       TEXT NOT NULL CHECK (state IN ('pending', 'claimed', 'waiting', 'sent', 'refused', 'moot')),
    attempts    INTEGER NOT NULL DEFAULT 0,
    created_us  INTEGER NOT NULL,
    next_try_us INTEGER NOT NULL,
    settled_us  INTEGER,
    reply       TEXT NOT NULL DEFAULT '',
    digest      INTEGER REFERENCES digest (id),
    CHECK ((settled_us IS NOT NULL) = (state IN ('sent', 'refused', 'moot'))),
    UNIQUE (alert, step, recipient)
) STRICT;
CREATE INDEX outbox_due ON outbox (next_try_us) WHERE state IN ('pending', 'waiting');
CREATE INDEX outbox_digest ON outbox (digest) WHERE digest IS NOT NULL;
CREATE TRIGGER outbox_message_is_rendered_once
    BEFORE UPDATE OF alert, step, recipient, role, asks, message_id, bytes ON outbox
    BEGIN SELECT raise(ABORT, 'a message is never changed'); END;
CREATE TRIGGER outbox_digest_is_for_good
    BEFORE UPDATE OF digest ON outbox WHEN OLD.digest IS NOT NULL OR OLD.attempts > 0
    BEGIN SELECT raise(ABORT, 'a message that may have gone out is never put into a digest'); END;
CREATE TRIGGER outbox_moves
    BEFORE UPDATE OF state ON outbox
    WHEN NOT ((OLD.state IN ('pending', 'waiting') AND NEW.state = 'claimed')
           OR (OLD.state = 'claimed' AND NEW.state IN ('sent', 'waiting', 'refused'))
           OR (OLD.state = 'waiting' AND NEW.state = 'moot'))
    BEGIN SELECT raise(ABORT, 'a message can not move that way'); END;
CREATE TRIGGER outbox_keeps BEFORE DELETE ON outbox
    BEGIN SELECT raise(ABORT, 'a message is never deleted'); END;

-- What happened, each row hashing the one before. `content` is the hash of the row that `subject` names.
CREATE TABLE audit (
    seq      INTEGER PRIMARY KEY,
    at_us    INTEGER NOT NULL,
    subject  TEXT NOT NULL,
    content  TEXT NOT NULL CHECK (length(content) = 64),
    previous TEXT NOT NULL CHECK (length(previous) = 64),
    hash     TEXT NOT NULL UNIQUE CHECK (length(hash) = 64)
) STRICT;

CREATE TRIGGER audit_only_grows BEFORE UPDATE ON audit BEGIN SELECT raise(ABORT, 'audit rows are never changed'); END;
CREATE TRIGGER audit_keeps BEFORE DELETE ON audit BEGIN SELECT raise(ABORT, 'audit rows are never deleted'); END;
CREATE TRIGGER fact_only_grows BEFORE UPDATE ON fact BEGIN SELECT raise(ABORT, 'facts are never changed'); END;
CREATE TRIGGER fact_keeps BEFORE DELETE ON fact BEGIN SELECT raise(ABORT, 'facts are never deleted'); END;
CREATE TRIGGER decision_only_grows BEFORE UPDATE ON decision BEGIN SELECT raise(ABORT, 'decisions are never changed'); END;
CREATE TRIGGER decision_keeps BEFORE DELETE ON decision BEGIN SELECT raise(ABORT, 'decisions are never deleted'); END;
CREATE TRIGGER file_only_grows BEFORE UPDATE ON file BEGIN SELECT raise(ABORT, 'file outcomes are never changed'); END;
CREATE TRIGGER file_keeps BEFORE DELETE ON file BEGIN SELECT raise(ABORT, 'file outcomes are never deleted'); END;
CREATE TRIGGER text_only_grows BEFORE UPDATE ON text BEGIN SELECT raise(ABORT, 'texts are never changed'); END;
CREATE TRIGGER text_keeps BEFORE DELETE ON text BEGIN SELECT raise(ABORT, 'texts are never deleted'); END;
