#!/bin/sh
# Run once, when the database is made: the table of labels, and a role for watcher that can read it and nothing else.
set -eu
psql --username "$POSTGRES_USER" --dbname "$POSTGRES_DB" --set ON_ERROR_STOP=1 \
    --set reader_password="$(cat /run/secrets/reader_password)" <<'SQL'
CREATE TABLE inspections (
    parcel text NOT NULL,
    revision integer NOT NULL DEFAULT 1,
    decided_at timestamptz NOT NULL,
    depot text NOT NULL,
    predicted text NOT NULL,
    observed text,
    labelled_at timestamptz,
    PRIMARY KEY (parcel, revision)
);
CREATE INDEX inspections_by_time ON inspections (decided_at);
CREATE ROLE reader LOGIN PASSWORD :'reader_password';
ALTER ROLE reader SET default_transaction_read_only = on;
GRANT SELECT ON inspections TO reader;
SQL
