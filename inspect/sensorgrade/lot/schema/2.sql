-- Version 2: what the counts of pixels can be made from again at other thresholds.

CREATE TABLE candidates (
    device INTEGER PRIMARY KEY REFERENCES devices ON DELETE CASCADE,
    layout TEXT NOT NULL,  -- JSON: shape, outputs with their sections, regions
    arrays BLOB NOT NULL   -- zlib: three numbers of rows (uint32), then the arrays by column
);
