"""Readings from a real PostgreSQL server, through SQLAlchemy and a driver."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from postgres_server import running_server, server_programs

import reconcile
from reconcile.cli import main
from reconcile.errors import InputError
from reconcile.readings import read_readings
from reconcile.start import start_case

PROGRAMS = server_programs()
pytestmark = pytest.mark.skipif(
    PROGRAMS is None, reason="no PostgreSQL server here: initdb and postgres are missing (Debian package postgresql)"
)
sqlalchemy = pytest.importorskip("sqlalchemy", reason="SQLAlchemy is not installed (extra sql)")
pytest.importorskip("psycopg", reason="the driver psycopg is not installed (extra dev)")

TAGS = ["F", "R", "D", "P", "T", "B"]


def skid(rows):
    rng = np.random.default_rng(21)
    return np.array([50.0, 150, 200, 40, 160, 10]) + rng.normal(size=(rows, 6)) * [0.5, 1.5, 2, 0.4, 1.6, 0.2]


@pytest.fixture(scope="module")
def server():
    with running_server(PROGRAMS) as folder:
        engine = sqlalchemy.create_engine(f"postgresql+psycopg://maker@/postgres?host={folder}")
        frame = pd.DataFrame(skid(30), columns=TAGS)
        frame.loc[4, "P"] = np.nan
        frame.insert(0, "time", pd.date_range("2025-03-01", periods=30, freq="10min", tz="UTC"))
        frame.to_sql("skid", engine, index=False)
        long = frame.melt("time", var_name="tag", value_name="value").dropna()
        long["status"] = "good"
        long.loc[3, "status"] = "bad"
        long.to_sql("history", engine, index=False)
        with engine.begin() as connection:
            connection.exec_driver_sql("CREATE VIEW last_hour AS SELECT * FROM skid ORDER BY time DESC LIMIT 6")
            connection.exec_driver_sql('CREATE TABLE exact ("F" numeric(9, 3), "R" double precision, "D" integer)')
            connection.exec_driver_sql("INSERT INTO exact VALUES (50.125, 150.5, 200), (NULL, 149.25, 201)")
        engine.dispose()
        yield folder


@pytest.fixture
def url(server):
    return f"postgresql+psycopg://maker@/postgres?host={server}"


def test_a_table_a_view_and_a_query_are_read(url):
    table = read_readings(url, query="skid", expected=TAGS)
    assert table.columns == tuple(TAGS)
    assert len(table) == 30
    expected = skid(30)
    expected[4, 3] = np.nan
    np.testing.assert_array_equal(table.values, expected)
    assert str(table.time.tz).endswith("UTC")
    assert len(read_readings(url, query="last_hour", expected=TAGS, sort=True)) == 6
    some = read_readings(url, query='SELECT time, "F" FROM skid WHERE "F" > 50 ORDER BY time')
    assert 0 < len(some) < 30
    assert some.values.min() > 50


def test_kinds_of_numbers_of_the_database(url):
    table = read_readings(url, query="exact")
    np.testing.assert_array_equal(table.values, [[50.125, 150.5, 200], [np.nan, 149.25, 201]])


def test_a_long_table_of_a_historian_is_read(url):
    table = read_readings(
        url, query="SELECT * FROM history ORDER BY time", shape="long", tag_column="tag", value_column="value",
        status_column="status", expected=TAGS,
    )  # fmt: skip
    assert len(table) == 30
    assert np.isnan(table.values[3, 0]) or not table.usable[3, 0]
    assert table.values[5, 1] == skid(30)[5, 1]


def test_a_case_runs_from_the_database(url, datasets, tmp_path):
    text = (datasets / "membrane_skid" / "case.yaml").read_text("utf-8")
    case = tmp_path / "case.yaml"
    case.write_text(text.replace("readings: readings.csv", f"readings: {{file: '{url}', query: skid}}"), "utf-8")
    result = reconcile.load_case(case).run()
    assert result.size == 30
    assert result.words.count("agrees") > 20
    done = CliRunner().invoke(main, ["check", str(case), "--readings", url])
    assert done.exit_code == 0, done.output
    assert "query 'SELECT * FROM" in done.output


def test_a_case_starts_from_the_database(url, tmp_path):
    out = tmp_path / "case.yaml"
    made = start_case(url, out, query="skid")
    assert [c.name for c in made.columns] == TAGS
    text = out.read_text("utf-8").replace("FILL_IN -> FILL_IN", "outside -> tank").replace("FILL_IN", "kg/h")
    out.write_text(text, "utf-8")
    assert CliRunner().invoke(main, ["check", str(out)]).exit_code == 0


@pytest.mark.parametrize(
    ("query", "told"),
    [
        (None, "the database has 4 tables: exact, history, last_hour, skid"),
        ("skidd", "there is no table 'skidd'; did you mean 'skid'?"),
        ("DELETE FROM skid", "the query is not one SELECT"),
        ("SELECT nonsense FROM skid", "the database says: column \"nonsense\" does not exist"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_told(url, query, told):
    with pytest.raises(InputError) as caught:
        read_readings(url, query=query)
    assert told in str(caught.value)


def test_a_query_changes_nothing(url):
    with pytest.raises(InputError):
        read_readings(url, query="WITH gone AS (DELETE FROM skid RETURNING *) SELECT * FROM gone; COMMIT")
    read_readings(url, query="WITH gone AS (DELETE FROM skid RETURNING *) SELECT * FROM gone")
    assert len(read_readings(url, query="skid")) == 30


def test_a_server_that_is_gone_and_a_password(tmp_path):
    with pytest.raises(InputError) as caught:
        read_readings(f"postgresql+psycopg://maker:secret@/postgres?host={tmp_path}", query="skid")
    assert "query-failed" in str(caught.value)
    assert "secret" not in str(caught.value)
