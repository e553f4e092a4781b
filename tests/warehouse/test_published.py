"""The published tables are complete, described, and read through one door that only reads."""

import json
import re
from pathlib import Path
from typing import Any

import duckdb
import polars as pl
import pytest

from warehouse import publish as publication
from warehouse import schema
from warehouse.published import Published, PublishedError, QueryError, worked_queries


def test_a_publication_holds_every_table_of_the_dictionary(standing: Path) -> None:
    """Database, Parquet tables and the reader agree on every table, its columns and its rows."""
    published = Published(standing)
    for name, table in schema.PUBLISHED.items():
        frame = published.table(name)
        assert frame.columns == list(table.columns)
        assert published.frame(f"FROM {name} ORDER BY ALL").equals(frame.sort(pl.all())) or name == "parts"
        assert published.frame(f"FROM {name}").height == frame.height
        if name not in ("beats", "quality_windows", "strips"):
            path = standing / "tables" / f"{name}.parquet"
            assert path.is_dir() if name in schema.SLICED else path.is_file()
            # What README says to users of other engines: the path of a file or of a folder, read the same way.
            assert pl.read_parquet(path).equals(frame)
    assert published.table("beats").height == 9


def test_every_table_and_column_says_what_it_is(standing: Path) -> None:
    """COMMENTs in the database and the table data_dictionary come from the column dictionary."""
    published = Published(standing)
    comments = published.frame("SELECT table_name, column_name, comment FROM duckdb_columns() WHERE NOT internal")
    assert comments["comment"].null_count() == 0
    assert (
        comments.height
        == published.table("data_dictionary").height
        == sum(len(table.columns) for table in schema.PUBLISHED.values())
    )
    tables = "SELECT comment FROM duckdb_tables() UNION ALL SELECT comment FROM duckdb_views() WHERE NOT internal"
    assert set(published.frame(tables)["comment"]) == {table.grain for table in schema.PUBLISHED.values()}


def test_the_older_reader_copy_holds_the_same_tables(standing: Path) -> None:
    """The copy in the older storage version has every table with the same rows."""
    folder = standing
    with duckdb.connect(str(folder / publication.DATABASE_FOR_OLDER_READERS), read_only=True) as older:
        tags = older.execute("SELECT tags FROM duckdb_databases() WHERE database_name LIKE 'burdenline%'").fetchone()
        days = older.execute("SELECT count(*), sum(v_beats) FROM wear_days").fetchone()
    assert "v1.2.0" in str(tags)
    assert days == (5, 90 * 96 * 3)


def test_rows_of_one_recording_come_alone(standing: Path) -> None:
    """`where` filters trend tables and tables that are read from the lake alike."""
    published = Published(standing)
    assert published.table("beats", {"recording_id": "R2"})["recording_id"].to_list() == ["R2"] * 5
    assert published.table("hours", {"recording_id": "R2"}).height == 24
    assert published.table("beats", {"recording_id": "R9"}).is_empty()


@pytest.mark.parametrize(
    ("sql", "words"),
    [
        ("FROM wear_day", "no published table 'wear_day'; did you mean wear_days?"),
        ("FROM main.wear_day", "no published table 'wear_day'; did you mean wear_days?"),
        ("FROM patients JOIN constraints USING (zone)", "no published table 'constraints'; published are: patients, "),
        ("SELECT v_burden FROM wear_days", "v_burden_pct"),
        ("SELECT xyzzy FROM wear_days", "`FROM data_dictionary` lists every table and column"),
        ("DROP TABLE wear_days", "expected one query that reads"),
        ("CREATE TABLE x (i INTEGER)", "expected one query that reads"),
        ("COPY wear_days TO 'x.csv'", "expected one query that reads"),
        ("SELECT 1; SELECT 2", "expected one query that reads"),
        ("", "expected one query that reads"),
        ("SELEKT 1", "syntax error"),
        ("FROM read_csv('/etc/hostname')", "disabled by configuration"),
        ("FROM glob('/etc/*')", "disabled by configuration"),
        ("INSTALL httpfs", "expected one query that reads"),
        ("SET threads = 1", "expected one query that reads"),
        ("SELECT error('broken row') FROM wear_days", "broken row"),
        ("SELECT 1 UNION ALL SELECT error('last row')::INTEGER", "last row"),
    ],
)
def test_a_query_that_does_not_read_the_publication_is_refused(standing: Path, sql: str, words: str) -> None:
    """Unknown names come with the nearest ones; writing and reading elsewhere is refused."""
    with pytest.raises(QueryError, match=re.escape(words)):
        Published(standing).frame(sql)


def test_tables_that_are_read_in_place_answer_every_kind_of_question(standing: Path) -> None:
    """Rows keep their order, and a description or an explanation of a view over parts is an answer, too."""
    published = Published(standing)
    beats = published.table("beats")
    assert published.frame("FROM beats ORDER BY recording_id DESC, sample DESC;").equals(
        beats.sort("recording_id", "sample", descending=True)
    )
    assert published.frame("DESCRIBE beats")["column_name"].to_list() == beats.columns
    assert published.frame("EXPLAIN FROM beats").height
    assert set(published.frame("SHOW TABLES")["name"]) == set(schema.PUBLISHED)


def test_an_unknown_table_comes_with_near_names(standing: Path) -> None:
    """The reader names the tables that may have been meant."""
    with pytest.raises(PublishedError, match=r"no published table 'weardays'; did you mean wear_days"):
        Published(standing).table("weardays")


@pytest.mark.parametrize("query", worked_queries(), ids=lambda query: query.name)
def test_every_worked_query_answers(standing: Path, query: Any) -> None:
    """Each worked query begins with its question and runs on a publication."""
    assert query.question.endswith("?")
    assert Published(standing).frame(query.sql).width >= 2


def test_a_folder_without_publication_says_what_to_do(tmp_path: Path) -> None:
    """Opening an empty folder names the command that publishes; an unknown table names the near ones."""
    with pytest.raises(PublishedError, match="nothing is published"):
        Published(tmp_path)


def test_the_manifest_names_what_the_edition_was_made_from(standing: Path) -> None:
    """Fingerprint, stamp, and rows and hash of every table stand in the manifest."""
    manifest = json.loads((standing / "manifest.json").read_text())
    assert (manifest["fingerprint"], manifest["stamp"], manifest["lake"]) == ("f1", {"version": "7"}, "../lake")
    assert manifest["tables"]["wear_days"]["rows"] == 5
