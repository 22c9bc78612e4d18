PRAGMA application_id = 1414349378;
PRAGMA user_version = 1;
BEGIN TRANSACTION;
CREATE TABLE instrument_facts (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    instrument_id INTEGER NOT NULL REFERENCES instruments (id),
    written_at TEXT NOT NULL,
    name TEXT NOT NULL,
    name_key TEXT NOT NULL,
    family TEXT NOT NULL,
    remarks TEXT NOT NULL,
    set_aside INTEGER NOT NULL CHECK (set_aside IN (0, 1))
);
INSERT INTO "instrument_facts" VALUES(1,'c5564c45-911d-4f95-8985-1a6e90819aac',1,'2026-12-01T19:40:24.686018+00:00','Heron 7','heron 7','violin','one-piece back',0);
CREATE TABLE instrument_uuids (
    uuid TEXT PRIMARY KEY,
    instrument_id INTEGER NOT NULL REFERENCES instruments (id)
);
INSERT INTO "instrument_uuids" VALUES('57c6ed28-742c-447b-911b-e0c6b5d74c4e',1);
CREATE TABLE instruments (
    id INTEGER PRIMARY KEY
);
INSERT INTO "instruments" VALUES(1);
CREATE TABLE measured_recordings (
    measurement_id INTEGER NOT NULL REFERENCES measurements (id),
    recording_id INTEGER NOT NULL REFERENCES recordings (id),
    PRIMARY KEY (measurement_id, recording_id)
) WITHOUT ROWID;
INSERT INTO "measured_recordings" VALUES(1,1);
CREATE TABLE measurements (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    session_id INTEGER NOT NULL REFERENCES sessions (id),
    role TEXT NOT NULL CHECK (role IN ('instrument', 'control')),
    measured_at TEXT NOT NULL,
    measured_with TEXT NOT NULL,
    instrument TEXT NOT NULL,
    note_count INTEGER NOT NULL,
    profile_sha256 TEXT NOT NULL
);
INSERT INTO "measurements" VALUES(1,'d7f5cc6c-5ed0-4b01-81eb-00f9c62da492',1,'instrument','2026-12-01T19:40:25.235904+00:00','not installed','Heron 7',2,'a5426a888a37e29bc62843cb2aa8e73239b521f805173c670c05faa35dbf5345');
CREATE TABLE profiles (
    measurement_id INTEGER PRIMARY KEY REFERENCES measurements (id),
    text_zlib BLOB NOT NULL
);
INSERT INTO "profiles" VALUES(1,X'789CC593CDAED3301085F73C4564B669B09DDF66C706F10EA8AA5C7B7C6DD5B18B93DBEA52F5DD193B15B448B04048289BCCF1F17C9339CA95E81027B190912C763A44D86021CD87530CDA3A202539439C6DF0646425B17E5EE2EB043EF93F430CBEE8D1322FE20550B1BE580C1417639774538BC9BA37D4CF3638EB5111CDDE7C2363D3F08AE23598D7CE57A2C4921A70CABB0DAD3794A1398630A17609F1389B704265B2328693093E79E7493857C8E015F8196259D0AA2F26722BC9228E3093F1CB954490212AEB5FD6327FD198CF0B565DC439CD6E046F3B5495E25B1C4C8114DD56B75CB694D2EE30D44C1E38EB40E97E10BD1275DD3783A662A05AB3ADE67080B607A9C86D57121F963B3ABD61D78F4D5A04BD7F36AD785B1289FB4313ADB643DDE4EDC5659F85740A5EA582572C7BDFA44B1D87549C82C59BFB13C47DD6D1D57625395AAF1065C029841911A7E0AD5CC738E6DC7484AF4F23383883DBAB031937AC6A5314B9A02B54BB10E27ADAB3949401111181D9034E6104DAA350C94F6F6586F007C830D0EA99D165E8EF21FCCF90F60EA91F20ACE618F813C6BF3AF783B2168F90FA01A2859B9F29C97FDB25D03DB94FEFDB9FD1F5B837FA5F93BB4FF0B054FACF8363CDF02B84B1F54FFDEBE476F979F71DD9DE55B9');
CREATE TABLE recording_places (
    id INTEGER PRIMARY KEY,
    recording_id INTEGER NOT NULL REFERENCES recordings (id),
    noted_at TEXT NOT NULL,
    kind TEXT NOT NULL CHECK (kind IN ('path', 'kept')),
    place NOT NULL
);
INSERT INTO "recording_places" VALUES(1,1,'2026-12-01T19:40:25.235341+00:00','path','/recordings/take.wav');
CREATE TABLE recordings (
    id INTEGER PRIMARY KEY,
    sha256 TEXT NOT NULL UNIQUE,
    file TEXT NOT NULL,
    size_bytes INTEGER NOT NULL
);
INSERT INTO "recordings" VALUES(1,'dd29442deca69f52c50006b831cb216edf78a7da33748f0a80ff19f2ebe57ecd','take.wav',5);
CREATE TABLE session_marks (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    session_id INTEGER NOT NULL REFERENCES sessions (id),
    written_at TEXT NOT NULL,
    set_aside INTEGER NOT NULL CHECK (set_aside IN (0, 1))
);
CREATE TABLE sessions (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    stage_id INTEGER NOT NULL REFERENCES stages (id),
    logged_at TEXT NOT NULL,
    date TEXT NOT NULL,
    room TEXT NOT NULL,
    microphone TEXT NOT NULL,
    microphone_distance_m REAL,
    player TEXT NOT NULL,
    bow TEXT NOT NULL,
    strings TEXT NOT NULL,
    temperature_c REAL,
    humidity_percent REAL,
    a4_hz REAL,
    remarks TEXT NOT NULL
);
INSERT INTO "sessions" VALUES(1,'57b2e4da-9230-4395-a2dd-843338726fbe',1,'2026-12-01T19:40:25.235171+00:00','','workshop','',NULL,'','','',NULL,NULL,NULL,'');
CREATE TABLE stages (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    instrument_id INTEGER NOT NULL REFERENCES instruments (id),
    name TEXT NOT NULL,
    name_key TEXT NOT NULL,
    UNIQUE (instrument_id, name_key)
);
INSERT INTO "stages" VALUES(1,'29340ae1-4a0a-4a66-9265-b5fbec5c6a40',1,'in the white','in the white');
CREATE TABLE take_recordings (
    take_id INTEGER NOT NULL REFERENCES takes (id),
    number INTEGER NOT NULL,
    recording_id INTEGER NOT NULL REFERENCES recordings (id),
    PRIMARY KEY (take_id, number)
);
INSERT INTO "take_recordings" VALUES(1,1,1);
CREATE TABLE takes (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    session_id INTEGER NOT NULL REFERENCES sessions (id),
    role TEXT NOT NULL CHECK (role IN ('instrument', 'control')),
    number INTEGER NOT NULL,
    UNIQUE (session_id, role, number)
);
INSERT INTO "takes" VALUES(1,'5dabef2e-0534-4542-9a4f-d893c9a56b8c',1,'instrument',1);
CREATE TABLE targets (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    added_at TEXT NOT NULL,
    name TEXT NOT NULL,
    name_key TEXT NOT NULL,
    text_sha256 TEXT NOT NULL,
    text_zlib BLOB NOT NULL
);
CREATE INDEX instrument_uuids_of ON instrument_uuids (instrument_id);
CREATE INDEX instrument_facts_of ON instrument_facts (instrument_id, written_at, uuid);
CREATE INDEX sessions_of ON sessions (stage_id);
CREATE INDEX session_marks_of ON session_marks (session_id, written_at, uuid);
CREATE INDEX recording_places_of ON recording_places (recording_id, kind);
CREATE INDEX take_recordings_of ON take_recordings (recording_id);
CREATE INDEX measurements_of ON measurements (session_id, role, measured_at, uuid);
CREATE INDEX targets_of ON targets (name_key, added_at);
CREATE TRIGGER instrument_facts_no_update BEFORE UPDATE ON instrument_facts BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER instrument_facts_no_delete BEFORE DELETE ON instrument_facts BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER instrument_uuids_no_update BEFORE UPDATE ON instrument_uuids BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER instrument_uuids_no_delete BEFORE DELETE ON instrument_uuids BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER instruments_no_update BEFORE UPDATE ON instruments BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER instruments_no_delete BEFORE DELETE ON instruments BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER measured_recordings_no_update BEFORE UPDATE ON measured_recordings BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER measured_recordings_no_delete BEFORE DELETE ON measured_recordings BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER measurements_no_update BEFORE UPDATE ON measurements BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER measurements_no_delete BEFORE DELETE ON measurements BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER profiles_no_update BEFORE UPDATE ON profiles BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER profiles_no_delete BEFORE DELETE ON profiles BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER recording_places_no_update BEFORE UPDATE ON recording_places BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER recording_places_no_delete BEFORE DELETE ON recording_places BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER recordings_no_update BEFORE UPDATE ON recordings BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER recordings_no_delete BEFORE DELETE ON recordings BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER session_marks_no_update BEFORE UPDATE ON session_marks BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER session_marks_no_delete BEFORE DELETE ON session_marks BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER sessions_no_update BEFORE UPDATE ON sessions BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER sessions_no_delete BEFORE DELETE ON sessions BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER stages_no_update BEFORE UPDATE ON stages BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER stages_no_delete BEFORE DELETE ON stages BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER take_recordings_no_update BEFORE UPDATE ON take_recordings BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER take_recordings_no_delete BEFORE DELETE ON take_recordings BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER takes_no_update BEFORE UPDATE ON takes BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER takes_no_delete BEFORE DELETE ON takes BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER targets_no_update BEFORE UPDATE ON targets BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
CREATE TRIGGER targets_no_delete BEFORE DELETE ON targets BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END;
COMMIT;
