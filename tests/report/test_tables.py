"""Result tables open in the tools people have, as they are."""

from pathlib import Path

import duckdb
import pandas as pd
import polars as pl
import pytest

from cohort.execute.run import run_study
from cohort.report.results import Results
from cohort.report.summary import rebuild
from cohort.study import load_study
from tests.execute.test_ranking import STUDY


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory) -> Results:
    folder = tmp_path_factory.mktemp("tables")
    (folder / "s.toml").write_text(STUDY)
    run_study(load_study(folder / "s.toml"), folder / "out", quiet=True, log=folder / "run.log")
    return rebuild(folder / "out", page=False)[0]


TABLES = ("subjects", "outcomes/steady", "meals/lunch", "ranking")


@pytest.mark.parametrize("table", TABLES)
def test_pandas_polars_and_duckdb_read_the_same(results: Results, table: str) -> None:
    folder = results.folder / table
    ours = results.ranking() if table == "ranking" else results._parts(table, None)
    assert len(pd.read_parquet(folder)) == ours.num_rows
    frame = pl.read_parquet(f"{folder}/*.parquet")
    assert frame.shape == (ours.num_rows, ours.num_columns)
    assert frame.null_count().row(0) == tuple(ours.column(name).null_count for name in frame.columns)
    counted = duckdb.sql(f"select count(*) from read_parquet('{folder}/*.parquet')").fetchall()
    assert counted == [(ours.num_rows,)]


def test_arrow_tables_go_over_as_they_are(results: Results) -> None:
    outcomes = results.outcomes("steady")
    assert pl.from_arrow(outcomes).shape[0] == outcomes.to_pandas().shape[0] == 64
    ((share,),) = duckdb.sql("select avg(oscillates::int) from outcomes").fetchall()
    assert share == pytest.approx(outcomes.to_pandas().oscillates.astype(float).mean())


def test_the_log_says_when_it_began_and_ended(results: Results) -> None:
    lines = (Path(results.folder).parent / "run.log").read_text().splitlines()
    assert "begins;" in lines[0] and "ends; " in lines[-1] and lines[0][:2] == "20"
