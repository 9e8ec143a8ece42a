"""Hostile study files, tables and series: each ends in a result or in the project's own words, soon and in little memory."""

import itertools
import os
import subprocess
import sys
import time
import tracemalloc
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.cli import main
from cohort.errors import Problem, RunError, StudyError, nearest, one_line
from cohort.execute.limits import free_bytes, lacking
from cohort.observe.detector import Rule
from cohort.observe.series import detect_series
from cohort.observe.table import read_series
from cohort.reading import UnreadableError, read_plain
from cohort.study import describe, plan, study_from
from cohort.study import files as data_files
from cohort.study.lines import locate
from cohort.study.tree import DEEPEST, LARGEST_TEXT, MOST_PROBLEMS
from tests.study.strategies import harmed, people, series, studies

ROOT = Path(__file__).parents[2]
SHORT = 'seed = 1\n[subjects]\ncount = 16\n[[arms]]\nname = "a"\nduration = "10 h"\n'
LAWS = "[subjects.parameters]\n"
SECONDS = 10.0  # the worst takes 1.4 s alone; tests run beside others
MEGABYTES = 250.0


@contextmanager
def soon() -> Iterator[None]:
    """Within a few seconds of the processor."""
    start = time.process_time()
    yield
    assert time.process_time() - start < SECONDS


def read(text: str | bytes, *overrides: str) -> str:
    """The problems of a study, or its plan in words; anything but StudyError is passed on."""
    data = text if isinstance(text, bytes) else text.encode()
    try:
        study = study_from(data, ROOT / "studies" / "x.toml", overrides)
        return describe(study, plan(study, 2))
    except StudyError as error:
        assert all(str(p) and "\n" not in str(p) for p in error.problems)  # noqa: PT017
        return str(error)


def shapes(*lines: str) -> str:
    return SHORT + "glucose = [ " + ", ".join(lines) + " ]\n"


def sampled(schedule: str) -> str:
    return SHORT + f"[sampling]\n[[sampling.schedules]]\nname = 'b'\n{schedule}\n"


HUGE = "0x" + "f" * 5000
DOTS = "a." * 200_000 + "a = 1\n"
NAMED: dict[str, tuple[str | bytes, str]] = {
    "count 10^18": (SHORT.replace("16", str(10**18)), "must be <= 1,000,000,000"),
    "duration 10^9 h": (SHORT.replace("10 h", "1e9 h"), "must be <="),
    "duration 1e999 h": (SHORT.replace("10 h", "1e999 h"), "is not a finite number"),
    "duration nan": (SHORT.replace('"10 h"', "nan"), "is not a finite number"),
    "duration a list of 100,000": (SHORT.replace('"10 h"', "[" + "1," * 100_000 + "]"), "is not a time"),
    "hexadecimal of 5,000 digits as a number": (SHORT + f"settle = {HUGE}", "more than 64 bits"),
    "hexadecimal of 5,000 digits as a count": (SHORT.replace("16", HUGE), "more than 64 bits"),
    "hexadecimal of 5,000 digits under an unknown key": (f"x = [[{HUGE}]]\n" + SHORT, "more than 64 bits"),
    "decimal of 100,000 digits": (SHORT.replace("16", "9" * 100_000), "is not TOML"),
    "whole number of 400 digits in a list": (
        SHORT + "[subjects.eligible]\n'a.growth_per_min' = [0, 1" + "0" * 400 + "]", "more than 64 bits"),
    "arrays 100,000 deep": (SHORT + "x = " + "[" * 100_000, "is nested too deeply"),
    "arrays 100 deep": (SHORT + "x = " + "[" * 100 + "]" * 100, "is nested too deeply; at most 40"),
    "inline tables 100,000 deep": (SHORT + "x = " + "{a=" * 100_000, "is nested too deeply"),
    "a key of 200,000 parts": (DOTS + SHORT, "is nested too deeply"),
    "a quoted key of 50,000 parts": ("'a' . " * 50_000 + "a = 1\n" + SHORT, "is nested too deeply"),
    "a header of 200,000 parts": (SHORT + "[" + DOTS[:-5] + "]\n", "is nested too deeply"),
    "dots after a long word": (SHORT + "x = '" + "w" * 400_000 + "." * 100_000 + "'", "no such key"),
    "a file of 50 MB": (b"#" * 50_000_000, "50,000,000 bytes, at most 1,000,000"),
    "a megabyte of unknown keys": ("".join(f"k{i} = 1\n" for i in range(80_000)), f"more problems than these {MOST_PROBLEMS}"),
    "a megabyte of headers": ("[[a]]\n" * 160_000, "no such key"),
    "a megabyte of numbers": (SHORT + "x = [" + "1," * 480_000 + "]", "no such key"),
    "a key of a megabyte": (f"{'k' * 900_000} = 1\n", "no such key"),
    "100,000 arms": ("[[arms]]\n" * 100_000, "at most 1,000 are allowed"),
    "1,000 strata": (SHORT + "[[subjects.strata]]\nshare = 0.001\n" * 1000, "1000 strata; at most 100 are allowed"),
    "100,001 sampling times": (sampled("times = [" + "1," * 100_001 + "]"), "at most 100,000 are allowed"),
    "100,000 sampling times": (sampled("times = [" + ",".join(map(str, range(100_000))) + "]"), "at most 1,000 a series"),
    "no sampling times": (sampled("times = []"), "is empty; it says when samples are taken"),
    "samples every 1e-300 min": (sampled("every = 1e-300\nduration = 10"), "must be >="),
    "samples begun at 1e308 min": (sampled("every = 10\nduration = 1e308\nstart = 1e308"), "an arm lasts at most"),
    "samples for 1e308 min": (sampled("every = 10\nduration = 1e308"), "an arm lasts at most"),
    "1,000 samples in a year": (
        sampled(f"times = [{','.join(str(k + 500_000 * (k > 500)) for k in range(1000))}]").replace("10 h", "366 d"),
        "at most 4,000 are searched"),
    "1,000 schedules": (
        SHORT + "[sampling]\n" + "[[sampling.schedules]]\n" * 1000, "1000 schedules; at most 100 are allowed"),
    "steps of 1,000,000 entries": (
        shapes(f"{{ shape = 'steps', times = [{'1,' * 400_000}], rates = [1] }}"), "400,000 entries; at most 100,000"),
    "steps of 60,000 entries": (
        shapes(f"{{ shape = 'steps', times = [{','.join(f'.{i:05d}' for i in range(60_000)).replace('.', '0.')}], "
               f"rates = [{'1,' * 60_000}] }}"), "60,000 steps, meals and cycles; at most 50,000"),
    "meals every 1e-300 min": (
        shapes("{ shape = 'meal', time = 0, amount = 1, absorption = 40, repeat = '1e-300 min' }"), "must be >= 1 min"),
    "a sine of 1e-300 min": (
        shapes("{ shape = 'sine', mean = 1, relative_amplitude = 1, period = 1e-300 }"), "must be >= 1 min"),
    "a phase of 400 digits": (
        shapes(f"{{ shape = 'sine', mean = 1, relative_amplitude = 1, period = 9, phase = {'9' * 400} }}"), "64 bits"),
    "300 meals every minute": (
        shapes(*["{ shape = 'meal', time = 0, amount = 1, absorption = 40, repeat = 1 }"] * 300), "at most 50,000"),
    "a cv of 1e-300": (SHORT + LAWS + "td.lognormal = { median = 36, cv = 1e-300 }", "too small to compute with"),
    "a uniform law from -1e308 to 1e308": (
        SHORT + LAWS + "td.uniform = { low = -1e308, high = 1e308 }", "too small to compute with"),
    "a normal law of 1e308 with an SD of 1e-308": (
        SHORT + LAWS + "td.normal = { mean = 1e308, sd = 1e-308 }", "too small to compute with"),
    "31 beta laws": (
        SHORT + "".join(
            f"[[subjects.strata]]\nname = 's{i}'\nshare = 0.01\nparameters.td.beta = {{ low = 20, high = 60, alpha = 2, "
            f"beta = {i + 1} }}\n" for i in range(31)), "31 beta laws"),
    "beta laws with shapes of 10,000": (
        SHORT + LAWS + "td.beta = { low = 20, high = 60, alpha = 1e4, beta = 1e4 }\n"
        "Rm.beta = { low = 20, high = 60, alpha = 9e3, beta = 1e4 }\n", "take too long to solve"),
    "100,000 outcomes to rank": (
        SHORT + "[ranking]\nmethod = 'sobol'\noutcomes = [" + "'x'," * 100_000 + "]", "at most 100 are allowed"),
    "a meal's number of 900 digits": (
        SHORT + f"[ranking]\nmethod = 'sobol'\noutcomes = ['meal_{'9' * 900}.peak_mg_dl']", "is not an outcome that"),
    "5,000 numbers of recruits": (
        SHORT + f"[recruitment]\nsizes = [{','.join(map(str, range(1, 5001)))}]", "at most 100 are allowed"),
    "a mean of nan to match": (
        SHORT + "[subjects.match.'a.glucose_mean_mg_dl']\nmean = nan\nsd = inf", "nan is not a finite number"),
    "a title with an escape": (f'title = "\\u001b[2J"\n{SHORT}', "no printable text"),
    "a title of two lines": (f'title = """a\nb"""\n{SHORT}', "no printable text"),
    "a title with no character": (f'title = "\\uFFFF"\n{SHORT}', "no printable text"),
    "a title of 100,000 characters": (f"title = '{'x' * 100_000}'\n{SHORT}", "100,000 characters; at most 1,000"),
    "a group with an escape": (SHORT + '[ranking.groups]\n"\\u001b" = ["td"]', "cannot be a name"),
    "a stratum of 61 characters": (
        SHORT + f"[[subjects.strata]]\nname = '{'s' * 61}'\nshare = 1", "61 characters; at most 60"),
    "two arms whose figures would share a file": (
        SHORT.replace('"a"', '"a b"') + "[[arms]]\nname = 'a-b'\nduration = 9", "is too much like 'a b'"),
    "UTF-16": (SHORT.encode("utf-16"), "is not UTF-8 text"),
    "UTF-16 without a mark": (SHORT.encode("utf-16-le"), "is not TOML"),
    "NUL bytes": (SHORT.encode() + b"\0" * 1000, "is not TOML"),
    "a lone surrogate": (SHORT.encode() + b"x = '\xed\xa0\x80'", "is not UTF-8 text"),
    "a lone return": ("seed = 1\r" + SHORT, "is not TOML"),
    "mixed newlines": (SHORT.replace("\n", "\r\n", 3).encode(), "16 subjects x 1 arm"),
    "a byte order mark": (b"\xef\xbb\xbf" + SHORT.encode(), "16 subjects x 1 arm"),
    "two byte order marks": (b"\xef\xbb\xbf" * 2 + SHORT.encode(), "is not TOML"),
    "a key twice": ("seed = 2\n" + SHORT, "is not TOML"),
    "a table by dots and by header": (SHORT + "[subjects]\ncount = 3", "is not TOML"),
    "the empty key": ("'' = 1\n" + SHORT, "no such key"),
    "a key of two lines": ('"a\\nb" = 1\n' + SHORT, "a\\nb: no such key"),
    "an empty file": (b"", "seed is missing"),
}  # fmt: skip


@pytest.mark.parametrize("name", NAMED)
def test_a_hostile_study_is_refused_in_words_and_soon(name: str) -> None:
    text, expected = NAMED[name]
    with soon():
        assert expected in read(text)


def most_held() -> float:
    """The most memory this process has held so far, MB."""
    return int(Path("/proc/self/status").read_text().split("VmHWM:")[1].split()[0]) / 1000


WORST = ("a key of 200,000 parts", "a megabyte of numbers", "a megabyte of unknown keys", "a file of 50 MB")


def test_the_worst_of_them_take_little_memory() -> None:
    code = ("from tests.study.test_hostile import *\nheld = most_held()\nfor name in WORST: read(NAMED[name][0])\n"
            "print(most_held() - held)")  # fmt: skip
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, check=True)
    assert float(done.stdout) < MEGABYTES


@pytest.mark.parametrize(
    ("word", "expected"),
    [
        ("a." * 60_000 + "a=1", "parts; at most 40 are allowed"),
        ("subjects.count={" + "a." * 60_000 + "a=1}", "is nested too deeply"),
        ("subjects.count=" + "[" * 100_000, "is not allowed"),
        ("subjects.count=" + "[" * 100 + "]" * 100, "is nested too deeply"),
        (f"subjects.count={HUGE}", "more than 64 bits"),
        (f"arms=[{{name={HUGE}}}]", "more than 64 bits"),
        ("title=\udcff", "no printable text"),
        ("title=\x1b[2J", "no printable text"),
        ("\x1b[2J=1", "\\x1b[2J"),
        ("\udcff.x=1", "\\udcff"),
        ("=1", "is not KEY=VALUE"),
        ("..=1", "no such key"),
        ("arms.a=1", "names a whole entry"),
        ("arms.zzz.duration=1", "has no entry named 'zzz'"),
        ("x" * 100_000, "is not KEY=VALUE"),
        ("arms=" + "9" * 100_000, "a list of tables is wanted"),
        ("subjects.count.deeper=1", "a table is not allowed"),
    ],
    ids=itertools.count(),
)
def test_a_hostile_override_is_refused_in_words_and_soon(word: str, expected: str) -> None:
    with soon():
        found = read(SHORT, word)
    assert expected in found
    assert len(found) < 5000


def test_overrides_reach_entries_by_name_only() -> None:
    assert "20 subjects" in read(SHORT, "subjects.count=20", "arms.a.duration='9 h'")


# ---- files that are none -----------------------------------------------------------------------------------------


@pytest.fixture
def odd(tmp_path: Path) -> Path:
    """A folder with a pipe, a link to a device, a loop of links, a link that leads out, a folder and a study."""
    place = tmp_path / "study"
    place.mkdir()
    os.mkfifo(place / "pipe.csv")
    (place / "zero.csv").symlink_to("/dev/zero")
    (place / "loop.csv").symlink_to("loop.csv")
    (tmp_path / "secret.csv").write_text("td\n30\n31\n")
    (place / "out.csv").symlink_to(tmp_path / "secret.csv")
    (place / "folder.csv").mkdir()
    (place / "closed.csv").write_text("td\n30\n")
    return place


@pytest.mark.parametrize("outside", [False, True])
@pytest.mark.parametrize(
    ("name", "within", "anywhere"),
    [
        ("pipe.csv", "is no plain file", "is no plain file"),
        ("zero.csv", "lies outside", "is no plain file"),
        ("/dev/zero", "lies outside", "is no plain file"),
        ("loop.csv", "cannot be read", "cannot be read"),
        ("out.csv", "lies outside", ""),
        ("../secret.csv", "lies outside", ""),
        ("./../study/../secret.csv", "lies outside", ""),
        ("folder.csv", "is no plain file", "is no plain file"),
        (".", "is no plain file", "is no plain file"),
        ("", "is no plain file", "is no plain file"),
        ("~/people.csv", "no file '~/people.csv'", "no file '~/people.csv'"),
        ("x" * 900, "name too long", "name too long"),
        ("closed.cvs", "did you mean 'closed.csv'?", "did you mean 'closed.csv'?"),
    ],
)
def test_a_data_file_is_a_plain_file_below_the_study(
    odd: Path, name: str, within: str, anywhere: str, outside: bool
) -> None:
    text = f"seed = 1\n[subjects]\ntable = '{name}'\n[[arms]]\nname = 'a'\nduration = '10 h'\n"
    expected = anywhere if outside else within
    with soon():
        if expected:
            with pytest.raises(StudyError) as caught:
                study_from(text.encode(), odd / "x.toml", outside=outside)
            assert expected in str(caught.value)
        else:
            assert study_from(text.encode(), odd / "x.toml", outside=outside).recipe.count == 2


@pytest.mark.parametrize("name", ["pipe.csv", "zero.csv", "loop.csv", "folder.csv", "missing.csv", "x" * 5000, "a\0b"])
def test_a_study_or_a_series_that_is_no_plain_file_ends_with_2(
    odd: Path, name: str, capsys: pytest.CaptureFixture[str]
) -> None:
    for command in ("check", "detect", "report"):
        with soon():
            assert main([command, str(odd / name)]) == 2
        message = capsys.readouterr().err
        assert "Traceback" not in message and message.count("\n") == 2


def test_a_file_that_says_too_little_of_its_size_is_read_up_to_the_cap(tmp_path: Path) -> None:
    with pytest.raises(UnreadableError, match="more than 10 bytes"):
        read_plain(Path("/proc/self/status"), 10)
    (tmp_path / "x").write_bytes(b"0123456789")
    assert read_plain(tmp_path / "x", 10) == b"0123456789"
    with pytest.raises(UnreadableError, match="has 10 bytes; at most 9 are allowed"):
        read_plain(tmp_path / "x", 9)


def table(folder: Path, data: bytes, name: str = "t.csv") -> str:
    (folder / name).write_bytes(data)
    text = f"seed = 1\n[subjects]\ntable = '{name}'\n[[arms]]\nname = 'a'\nduration = '10 h'\n"
    try:
        return f"{study_from(text.encode(), folder / 'x.toml').recipe.count} subjects"
    except StudyError as error:
        return str(error)


@pytest.mark.parametrize(
    ("data", "expected"),
    [
        (b",".join(b"c%d" % i for i in range(200_000)) + b"\n", f"more problems than these {MOST_PROBLEMS}"),
        (b"td," * 200_000 + b"\n", "has the column 'td' twice"),
        (b"td\n" + b"1" * 120_000 + b"\n", "is not a finite number"),
        (b"td\n" + b"1" * 200_000 + b"\n", "is not CSV"),
        (b"td\n" + b"\n" * 6_000_000, "6,000,002 cells; at most 5,000,000 are allowed"),
        (b"td\n1\r2\n", "new-line character"),
        ("td\n30\n".encode("utf-16"), "is not UTF-8 text"),
        (b"\x1b[2J\n30\n", "\\x1b[2J"),
        (b'"td\n30\n', "is no parameter"),
    ],
    ids=itertools.count(),
)
def test_a_hostile_table_is_refused_in_words_and_soon(tmp_path: Path, data: bytes, expected: str) -> None:
    with soon():
        found = table(tmp_path, data)
    assert expected in found


def test_a_table_above_the_cap_is_refused_with_its_size(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(data_files, "LARGEST_FILE", 9)
    assert "cannot be read: has 12 bytes; at most 9 are allowed" in table(tmp_path, b"td\n30\n31\n32\n")


def parquet(folder: Path, columns: pa.Table) -> str:
    pq.write_table(columns, folder / "made.parquet")
    return table(folder, (folder / "made.parquet").read_bytes(), "t.parquet")


def test_a_parquet_table_of_a_few_bytes_cannot_blow_up(tmp_path: Path) -> None:
    with soon():
        many = pa.table({"td": pa.repeat(pa.scalar(30.0), 6_000_000)})
        assert "6,000,000 cells; at most 5,000,000" in parquet(tmp_path, many)
    words = pa.array(["x" * 1_000_000]).dictionary_encode()
    said = pa.DictionaryArray.from_arrays(pa.array(np.zeros(2000, np.int32)), words.dictionary)
    tracemalloc.start()
    try:
        assert "2000 subjects" in parquet(tmp_path, pa.table({"id": said, "td": np.full(2000, 30.0)}))
        assert tracemalloc.get_traced_memory()[1] / 1e6 < MEGABYTES
    finally:
        tracemalloc.stop()


def test_a_parquet_table_of_other_kinds_is_refused(tmp_path: Path) -> None:
    assert "holds no plain values" in parquet(tmp_path, pa.table({"td": [[1.0]]}))
    twice = pa.Table.from_arrays([pa.array([1.0]), pa.array([2.0])], names=["td", "td"])
    assert "two columns have one name" in parquet(tmp_path, twice)
    assert "is no Parquet file" in table(tmp_path, b"PAR1" + b"\xff" * 100 + b"PAR1", "t.parquet")
    assert "is no Parquet file" in table(tmp_path, b"", "t.parquet")


# ---- series ------------------------------------------------------------------------------------------------------

HEAD = b"time (min),subject,glucose (mg/dL)\n"


def series_of(folder: Path, data: bytes) -> str:
    path = folder / "s.csv"
    path.write_bytes(data)
    try:
        return f"{len(read_series(path))} series"
    except StudyError as error:
        assert all("\n" not in str(p) for p in error.problems)  # noqa: PT017
        return str(error)


@pytest.mark.parametrize(
    ("data", "expected"),
    [
        (HEAD + b"1e308,a,90\n", "is beyond 1,000,000,000 min"),
        (HEAD + b"0,a,90\n1e-9,a,91\n", "is there twice"),
        (HEAD + b"0,\x1b[2J,90\n", "no printable text"),
        (HEAD + b"0," + b"x" * 101 + b",90\n", "a name has at most 100"),
        (HEAD + b"".join(b"0,s%d,90\n" % i for i in range(2001)), "2,001 series; at most 2,000"),
        (HEAD + b"x,a,90\n" * 300_000, "and at least 100,000 more like these"),
        (b"time (min)," + b"glucose (mg/dL)," * 100_000 + b"\n0\n", "is there more than once"),
        (HEAD + b"\n" * 6_000_000, "cells; at most 5,000,000"),
        (b"#" * 50_000_001, "50,000,001 bytes; at most 50,000,000"),
        (b"\xff\xfet\0i\0", "is not UTF-8 text"),
        (b"time (\x00min),glucose (mg/dL)\n0,90\n", "is no unit of time"),
        (b"", "is empty"),
        (b"\xef\xbb\xbf", "is empty"),
    ],
    ids=itertools.count(),
)
def test_a_hostile_series_is_refused_in_words_and_soon(tmp_path: Path, data: bytes, expected: str) -> None:
    with soon():
        found = series_of(tmp_path, data)
    assert expected in found


def test_a_series_with_a_gap_of_a_century_is_not_searched(tmp_path: Path) -> None:
    rows = [f"{10 * k + (5e7 if k >= 30 else 0)},a,{90 + k % 11}" for k in range(60)]
    (tmp_path / "s.csv").write_text("time (min),subject,glucose (mg/dL)\n" + "\n".join(rows))
    with soon():
        found = detect_series(read_series(tmp_path / "s.csv"), Rule(), {"glucose": 0.02}, tmp_path)
    assert "at most 66,666 are searched. Split the record" in found.refused[0]


# ---- what cannot fit ---------------------------------------------------------------------------------------------


def test_check_refuses_what_cannot_fit_with_the_numbers(tmp_path: Path) -> None:
    meals = shapes("{ shape = 'meal', time = 0, amount = 1, absorption = 40, repeat = 1 }").replace("10 h", "80 h")
    study = study_from(meals.replace("16", str(10**9)).encode(), tmp_path / "x.toml")
    found = lacking(plan(study, 4), tmp_path)
    assert "of disk and" in found[0] and plan(study).disk_mb > 1e9 * 4800 * 9 * 4 / 1e6
    steps = shapes(
        f"{{ shape = 'steps', times = [{','.join(f'{i}e-2' for i in range(40_000))}], rates = [{'1,' * 40_000}] }}"
    )
    many = plan(study_from(steps.encode(), tmp_path / "x.toml"), 100)
    assert many.memory_mb > 100 * 40_000 * 0.1


def test_a_result_folder_of_an_impossible_name_ends_in_words(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "x.toml").write_text(SHORT)
    assert free_bytes(tmp_path / ("x" * 5000)) > 0
    assert main(["run", str(tmp_path / "x.toml"), "--out", str(tmp_path / ("x" * 5000))]) == 3
    assert "cannot be made" in capsys.readouterr().err


@pytest.mark.parametrize("address", ["x", "tcp://", "tcp://host", "host:port", "a b:1", "tcp://host:1/x", "x" * 10_000])
def test_an_address_without_a_port_is_no_address(address: str, capsys: pytest.CaptureFixture[str]) -> None:
    with soon(), pytest.raises(SystemExit) as ended:
        main(["run", "x.toml", "--scheduler", address])
    assert ended.value.code == 2 and "is no address such as tcp://host:8786" in capsys.readouterr().err


def test_a_letter_that_the_terminal_lacks_is_no_traceback(tmp_path: Path) -> None:
    (tmp_path / "x.toml").write_text("title = 'Wie viele schwingen? \u2026 \u03b1'\n" + SHORT, encoding="utf-8")
    done = subprocess.run([sys.executable, "-m", "cohort", "check", str(tmp_path / "x.toml")], capture_output=True, text=True,
                          env={**os.environ, "PYTHONIOENCODING": "ascii", "PYTHONPATH": str(ROOT)}, check=False)  # fmt: skip
    assert done.returncode == 0 and "\\u2026" in done.stdout


def test_too_little_memory_is_said(tmp_path: Path) -> None:
    code = ("import resource, sys\nfrom cohort import cli\nfrom cohort.study import load_study\n"
            "def check(_): return len(bytearray(10**12))\ncli.check = check\n"
            "resource.setrlimit(resource.RLIMIT_AS, (8 * 10**9,) * 2)\nsys.exit(cli.main(['check', 'x']))")  # fmt: skip
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, check=False)
    assert done.returncode == 3 and done.stderr.startswith("there is not enough memory")


def test_messages_are_one_line_each() -> None:
    assert str(Problem("a\nb", "c\x1b[2J\u2028", "f\r", 1)) == "f\\r:1: a\\nb: c\\x1b[2J\\u2028"
    assert str(RunError("a\nb")) == "a\\nb"
    assert len(one_line("x" * 10**6)) < 1100
    assert nearest("x" * 10**6, ["x"]) == ""


def test_a_place_that_lies_deep_ends() -> None:
    for text in ("[a." * 100_000, "a=[[" * 100_000, "x={" * 100_000, DOTS, '"""' + '"a' * 100_000):
        with soon():
            assert len(locate(text)) < 200_000
    assert DEEPEST < 60 and LARGEST_TEXT == 1_000_000


# ---- by the grammar ----------------------------------------------------------------------------------------------

SHORT_FORM = settings(max_examples=150, derandomize=True)
LONG_FORM = settings(max_examples=20_000)


def ends_well(data: bytes) -> None:
    found = read(data)
    assert found.strip()


@SHORT_FORM
@given(studies(wild=False))
def test_studies_by_the_schema_end_well(text: str) -> None:
    ends_well(text.encode())


@SHORT_FORM
@given(studies())
def test_studies_with_any_value_end_well(text: str) -> None:
    ends_well(text.encode("utf-8", "replace"))


@SHORT_FORM
@given(studies(wild=False).flatmap(harmed))
def test_harmed_texts_of_studies_end_well(data: bytes) -> None:
    ends_well(data)


@SHORT_FORM
@given(series())
def test_series_end_well(tmp_path_factory: pytest.TempPathFactory, data: bytes) -> None:
    assert series_of(tmp_path_factory.getbasetemp(), data)


@SHORT_FORM
@given(people())
def test_tables_end_well(tmp_path_factory: pytest.TempPathFactory, data: bytes) -> None:
    assert table(tmp_path_factory.getbasetemp(), data)


@pytest.mark.long
@LONG_FORM
@given(
    st.one_of(studies(), studies(wild=False)).flatmap(harmed) | studies().map(lambda t: t.encode("utf-8", "replace"))
)
def test_many_studies_end_well(data: bytes) -> None:
    ends_well(data)
