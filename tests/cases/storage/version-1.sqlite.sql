-- The tables as fhirgallop 0.1.0 made them.
CREATE TABLE hook_cards (
    card VARCHAR(36) NOT NULL,
    service VARCHAR(64) NOT NULL,
    patient VARCHAR(64) NOT NULL,
    encounter VARCHAR(64) NOT NULL,
    shown BLOB NOT NULL,
    at VARCHAR(35) NOT NULL,
    PRIMARY KEY (card)
);
CREATE INDEX hook_cards_patient ON hook_cards (patient);
CREATE TABLE hook_feedback (
    id INTEGER NOT NULL,
    "key" VARCHAR(64) NOT NULL,
    service VARCHAR(64) NOT NULL,
    card VARCHAR(36) NOT NULL,
    matched BOOLEAN NOT NULL,
    outcome VARCHAR(16) NOT NULL,
    suggestions BLOB NOT NULL,
    reason VARCHAR(4000) NOT NULL,
    reason_system VARCHAR(4000) NOT NULL,
    comment VARCHAR(4000) NOT NULL,
    at VARCHAR(40) NOT NULL,
    received VARCHAR(35) NOT NULL,
    PRIMARY KEY (id),
    UNIQUE ("key")
);
CREATE INDEX hook_feedback_card ON hook_feedback (card);
CREATE TABLE hook_instances (
    instance VARCHAR(64) NOT NULL,
    patient VARCHAR(64) NOT NULL,
    memory BLOB NOT NULL,
    PRIMARY KEY (instance)
);
CREATE INDEX hook_instances_patient ON hook_instances (patient);
CREATE TABLE hook_memories (
    patient VARCHAR(64) NOT NULL,
    version INTEGER NOT NULL,
    memory BLOB NOT NULL,
    PRIMARY KEY (patient)
);
CREATE TABLE schema_version (
    version INTEGER NOT NULL,
    PRIMARY KEY (version)
);
CREATE TABLE submissions (
    id INTEGER NOT NULL,
    exam VARCHAR(45) NOT NULL,
    edition VARCHAR(4) NOT NULL,
    snomed BOOLEAN NOT NULL,
    version INTEGER NOT NULL,
    map_name VARCHAR(200) NOT NULL,
    map_version VARCHAR(200) NOT NULL,
    record_hash VARCHAR(64) NOT NULL,
    received VARCHAR(35) NOT NULL,
    bundle BLOB NOT NULL,
    PRIMARY KEY (id),
    CONSTRAINT submissions_exam_version UNIQUE (exam, edition, snomed, version)
);
CREATE INDEX submissions_received ON submissions (received);
