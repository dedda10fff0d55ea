"""The tables of the ledger and how an older ledger becomes a newer one (``PRAGMA user_version``)."""

from __future__ import annotations

# One entry a version; each is run once, in one transaction with the step of user_version. Never edit one that shipped.
MIGRATIONS: tuple[tuple[str, ...], ...] = (
    (
        """CREATE TABLE recording (
            id INTEGER PRIMARY KEY,
            name TEXT NOT NULL,              -- path within the inbox
            source TEXT NOT NULL,            -- its folder within the inbox, '.' for the inbox itself
            sha256 TEXT NOT NULL,            -- of all its files, in the reader's order
            signature TEXT NOT NULL,         -- sizes and times of the files when they were read
            n_bytes INTEGER NOT NULL,
            arrived_at REAL NOT NULL,        -- seconds since 1970
            state TEXT NOT NULL CHECK (state IN ('claimed', 'checked', 'unreadable', 'gone')),
            owner TEXT NOT NULL,             -- who has it in hand, or had
            lease_until REAL NOT NULL,
            tries INTEGER NOT NULL DEFAULT 1,
            report TEXT NOT NULL UNIQUE COLLATE NOCASE,  -- folder of its report
            checked_at REAL,
            verdict TEXT CHECK (verdict IN ('accept', 'accept-in-part', 'repeat')),
            patient_first TEXT,              -- the patterns found; empty: none
            format TEXT, device TEXT, fs_hz REAL, duration_s REAL,
            profile TEXT, software TEXT, model_sha256 TEXT,
            culprit TEXT,                    -- the electrode that the first advice names
            error TEXT,                      -- why it could not be checked
            routed_to TEXT, route_error TEXT,
            line TEXT, told INTEGER NOT NULL DEFAULT 0,
            UNIQUE (name, sha256),
            CHECK ((state = 'checked') = (verdict IS NOT NULL)),
            CHECK (state NOT IN ('unreadable', 'gone') OR error IS NOT NULL)
        )""",
        "CREATE INDEX recording_state ON recording (state)",
        """CREATE TABLE lead (
            recording_id INTEGER NOT NULL REFERENCES recording ON DELETE CASCADE,
            lead TEXT NOT NULL,
            spoilt REAL NOT NULL,            -- share of the time in which nothing can be measured
            PRIMARY KEY (recording_id, lead)
        ) WITHOUT ROWID""",
        """CREATE TABLE fault (
            recording_id INTEGER NOT NULL REFERENCES recording ON DELETE CASCADE,
            lead TEXT NOT NULL,
            kind TEXT NOT NULL,
            fraction REAL NOT NULL,
            PRIMARY KEY (recording_id, lead, kind)
        ) WITHOUT ROWID""",
        """CREATE TABLE electrode (
            recording_id INTEGER NOT NULL REFERENCES recording ON DELETE CASCADE,
            electrode TEXT NOT NULL,
            noise_uv REAL,
            share REAL,
            PRIMARY KEY (recording_id, electrode)
        ) WITHOUT ROWID""",
        """CREATE TABLE advice (
            recording_id INTEGER NOT NULL REFERENCES recording ON DELETE CASCADE,
            rank INTEGER NOT NULL,
            action TEXT NOT NULL,
            target TEXT,
            text TEXT NOT NULL
        )""",
        "CREATE INDEX advice_recording ON advice (recording_id)",
        """CREATE TABLE alert (
            id INTEGER PRIMARY KEY,
            recording_id INTEGER NOT NULL REFERENCES recording ON DELETE CASCADE,
            kind TEXT NOT NULL CHECK (kind IN ('patient-first', 'repeat', 'unreadable')),
            payload TEXT NOT NULL,
            created_at REAL NOT NULL,
            delivered_at REAL,               -- NULL: not delivered yet
            tries INTEGER NOT NULL DEFAULT 0,
            next_try REAL NOT NULL,
            last_error TEXT,
            owner TEXT NOT NULL DEFAULT '',
            lease_until REAL NOT NULL DEFAULT 0
        )""",
        "CREATE INDEX alert_open ON alert (next_try) WHERE delivered_at IS NULL",
        """CREATE TABLE overruling (
            id INTEGER PRIMARY KEY,
            recording_id INTEGER NOT NULL REFERENCES recording ON DELETE CASCADE,
            verdict TEXT NOT NULL CHECK (verdict IN ('accept', 'accept-in-part', 'repeat')),
            original TEXT NOT NULL,          -- the program's verdict, or 'unreadable'
            because TEXT NOT NULL CHECK (length(trim(because)) > 0),
            decided_at REAL NOT NULL
        )""",
    ),
)
