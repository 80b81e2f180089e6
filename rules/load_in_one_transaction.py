"""Stage a file, judge it, and move its rows into the table or undo everything, in one transaction.

    python rules/load_in_one_transaction.py rules/substation_heat.yaml FILE.csv

The address of the database is in SERCHECK_SOURCE_WAREHOUSE, such as postgresql+psycopg://loader@host/warehouse.
Exit status as with `sercheck gate`: 0 the rows are in the table, 1 held and nothing changed, 2 trouble and nothing
changed. Run again after a kill, it ends as the first run would have: what the ledger decided stands, and rows that are
there are not put in twice.
"""

import csv
import os
import sys
from pathlib import Path

from sqlalchemy import NullPool, create_engine, text

import sercheck

TABLES = """
CREATE TABLE IF NOT EXISTS heat (
    substation TEXT NOT NULL, read_at TIMESTAMP WITH TIME ZONE NOT NULL, kwh DOUBLE PRECISION,
    PRIMARY KEY (substation, read_at)
);
CREATE TEMPORARY TABLE staged (substation TEXT, read_at TIMESTAMP WITH TIME ZONE, kwh DOUBLE PRECISION)
"""
STAGE = "INSERT INTO staged (substation, read_at, kwh) VALUES (:substation, :read_at, :kwh)"
BEFORE = "SELECT substation, read_at, kwh FROM heat WHERE read_at < (SELECT min(read_at) FROM staged)"
MOVE = """
INSERT INTO heat (substation, read_at, kwh) SELECT substation, read_at, kwh FROM staged WHERE true
ON CONFLICT (substation, read_at) DO NOTHING
"""


def load(rules: str, file: str, address: str) -> sercheck.Verdict:
    """Load one file, or nothing of it."""
    engine = create_engine(address, poolclass=NullPool)  # closed at the end, whatever happened
    with engine.connect() as connection, connection.begin() as transaction:
        for statement in TABLES.split(";"):
            connection.execute(text(statement))
        with Path(file).open(encoding="utf-8", newline="") as lines:
            rows = [{**row, "kwh": float(row["kwh"]) if row["kwh"] else None} for row in csv.DictReader(lines)]
        connection.execute(text(STAGE), rows)
        any_before = connection.execute(text("SELECT count(*) FROM heat")).scalar()
        verdict = sercheck.gate(
            rules,
            sercheck.rows(connection, table="staged"),
            history=sercheck.rows(connection, query=BEFORE) if any_before else None,
            store=os.environ.get("SERCHECK_STORE", ".sercheck"),
        )
        if verdict.released:
            connection.execute(text(MOVE))
        else:
            transaction.rollback()
    return verdict


if __name__ == "__main__":
    try:
        answer = load(sys.argv[1], sys.argv[2], os.environ["SERCHECK_SOURCE_WAREHOUSE"])
    except sercheck.SercheckError as error:
        print(error, file=sys.stderr)
        sys.exit(2)
    print(f"{answer.decision} {answer.batch_id}")
    sys.exit(0 if answer.released else 1)
