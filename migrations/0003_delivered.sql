-- How far the events have been handed to the one receiver outside: everything up
-- to this number of the one sequence is settled.
CREATE TABLE delivered (
    id    INTEGER PRIMARY KEY CHECK (id = 1),
    event INTEGER NOT NULL
) STRICT;
