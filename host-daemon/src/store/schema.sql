CREATE TABLE about (
    layout INTEGER NOT NULL -- checksum of this text: another text, another store
) STRICT;
CREATE TABLE controller (
    id INTEGER PRIMARY KEY,
    name TEXT NOT NULL UNIQUE -- as in the plant file
) STRICT;
CREATE TABLE boot (
    controller INTEGER NOT NULL REFERENCES controller (id),
    boot INTEGER NOT NULL, -- the 64 bits of an unsigned number
    anchor_us INTEGER NOT NULL, -- UTC of the boot's time zero, us since 1970; never changed
    seen_us INTEGER NOT NULL,
    name TEXT NOT NULL, -- what the controller calls itself
    profile_checksum INTEGER NOT NULL,
    payload_layout INTEGER NOT NULL,
    PRIMARY KEY (controller, boot)
) STRICT, WITHOUT ROWID;
CREATE TABLE record (
    controller INTEGER NOT NULL REFERENCES controller (id),
    boot INTEGER NOT NULL,
    number INTEGER NOT NULL,
    machine INTEGER NOT NULL,
    received_us INTEGER NOT NULL, -- UTC, us since 1970
    at_ms INTEGER NOT NULL, -- after the boot's time zero, does not wrap
    payload BLOB NOT NULL, -- as it came over the line
    PRIMARY KEY (controller, boot, number)
) STRICT, WITHOUT ROWID;
CREATE TABLE gap (
    controller INTEGER NOT NULL REFERENCES controller (id),
    boot INTEGER NOT NULL,
    first INTEGER NOT NULL,
    last INTEGER NOT NULL, -- included
    noticed_us INTEGER NOT NULL,
    PRIMARY KEY (controller, boot, first)
) STRICT, WITHOUT ROWID;
CREATE TABLE refused (
    controller INTEGER PRIMARY KEY REFERENCES controller (id),
    duplicates INTEGER NOT NULL, -- records that came again
    conflicts INTEGER NOT NULL -- records whose number was taken by another
) STRICT;
CREATE TABLE alarm (
    id INTEGER PRIMARY KEY AUTOINCREMENT,
    at_us INTEGER NOT NULL, -- plant time, UTC, us since 1970
    written_us INTEGER NOT NULL,
    machine TEXT NOT NULL,
    kind TEXT NOT NULL,
    state TEXT NOT NULL,
    causes TEXT NOT NULL, -- a line each: weight, space, words
    text TEXT NOT NULL
) STRICT;
CREATE INDEX alarm_of_machine ON alarm (machine, kind, id);
CREATE TRIGGER alarm_stays BEFORE UPDATE ON alarm BEGIN SELECT RAISE(ABORT, 'the alarm journal is append-only'); END;
CREATE TRIGGER alarm_is_kept BEFORE DELETE ON alarm BEGIN SELECT RAISE(ABORT, 'the alarm journal is append-only'); END;
