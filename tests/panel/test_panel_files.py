"""Files: CSV and Parquet, one, many, a folder; and everything that is not what it claims to be."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError, StresskitError
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import LoanData
from stresskit.panel.source import Source, reading, within_means, workspace
from tests.panel.worlds import background, left_out, loan, run, stays, study

ROWS = background() + loan("007", "2020-02", "CCC") + loan("8", "2020-01", "CD")
FRAME = pd.DataFrame(ROWS)


def read(base: Path, file: str, **loans: Any) -> LoanData:
    return prepare_loans(study(loans={"file": file, **loans}), base=base)


def _same(data: LoanData) -> None:
    expected = run(ROWS, False)
    assert stays(data.risk_set) == stays(expected.risk_set)
    assert data.portfolio.balance.tolist() == expected.portfolio.balance.tolist()
    assert data.reconciliation.equals(expected.reconciliation)


def _typed() -> pd.DataFrame:
    return FRAME.assign(month=pd.to_datetime(FRAME["month"]), opened=pd.to_datetime(FRAME["opened"]))


WRITERS: dict[str, Callable[[Path], str]] = {
    "csv": lambda p: FRAME.to_csv(p / "l.csv", index=False) or "l.csv",
    "upper case name": lambda p: FRAME.to_csv(p / "L.CSV", index=False) or "L.CSV",
    "crlf and byte order mark": lambda p: FRAME.to_csv(
        p / "l.csv", index=False, lineterminator="\r\n", encoding="utf-8-sig") or "l.csv",
    "all quoted": lambda p: FRAME.to_csv(p / "l.csv", index=False, quoting=1) or "l.csv",
    "parquet of text": lambda p: FRAME.to_parquet(p / "l.parquet") or "l.parquet",
    "parquet of dates": lambda p: _typed().to_parquet(p / "l.parquet") or "l.parquet",
    "parquet of categories": lambda p: FRAME.astype({"state": "category"}).to_parquet(p / "l.parquet") or "l.parquet",
}  # fmt: skip


@pytest.mark.parametrize("name", WRITERS)
def test_every_form_of_one_file(tmp_path: Path, name: str) -> None:
    file = WRITERS[name](tmp_path)
    data = read(tmp_path, file)
    _same(data)
    assert dict(data.digests) == {file: hashlib.sha256((tmp_path / file).read_bytes()).hexdigest()}


@pytest.mark.parametrize("kind", ["csv", "parquet"])
@pytest.mark.parametrize("pattern", ["parts", "parts/*.{kind}", "parts/**/*.{kind}", "par*/part?.{kind}"])
def test_globs_and_folders(tmp_path: Path, kind: str, pattern: str) -> None:
    """Three parts, columns in another order in one of them, hidden files passed over."""
    folder = tmp_path / "parts"
    folder.mkdir()
    for i, part in enumerate(np.array_split(np.arange(len(FRAME)), 3)):
        piece = FRAME.iloc[part]
        piece = piece[list(reversed(piece.columns))] if i == 1 else piece
        path = folder / f"part{i}.{kind}"
        piece.to_csv(path, index=False) if kind == "csv" else piece.to_parquet(path)
    (folder / f".part9.{kind}").write_text("hidden")
    if pattern == "parts":
        (folder / f"_part9.{kind}").write_text("hidden")
        (folder / ".kept").mkdir()
        (folder / ".kept" / f"part9.{kind}").write_text("hidden")
    (folder / "notes.txt").write_text("not a table")
    data = read(tmp_path, pattern.format(kind=kind))
    _same(data)
    assert set(data.digests) == {f"parts/part{i}.{kind}" for i in range(3)}


def test_files_beside_the_study_folder_have_relative_names(tmp_path: Path) -> None:
    (tmp_path / "study").mkdir()
    FRAME.to_csv(tmp_path / "l.csv", index=False)
    data = read(tmp_path / "study", "../l.csv")
    _same(data)
    assert list(data.digests) == ["../l.csv"]
    assert list(read(tmp_path / "study", str(tmp_path / "l.csv")).digests) == ["../l.csv"]


def test_partitioned_folders(tmp_path: Path) -> None:
    """A year=... in a folder's name is no column."""
    for year in (2019, 2020):
        (tmp_path / "all" / f"year={year}").mkdir(parents=True)
    FRAME.iloc[:5].to_parquet(tmp_path / "all/year=2019/a.parquet")
    FRAME.iloc[5:].to_parquet(tmp_path / "all/year=2020/a.parquet")
    _same(read(tmp_path, "all"))


def test_names_with_quotes_spaces_and_sql(tmp_path: Path) -> None:
    (tmp_path / "it's; DROP").mkdir()
    renamed = FRAME.rename(columns={"owed": 'k", 1 --', "interest": "label's m"})
    renamed.to_csv(tmp_path / "it's; DROP" / "my 'loans'.csv", index=False)
    columns = {
        "loan": "id", "period": "month", "origination": "opened", "maturity": "matures",
        "balance": 'k", 1 --', "rate": "label's m",
    }  # fmt: skip
    _same(read(tmp_path, "it's; DROP/my 'loans'.csv", columns=columns))


def test_columns_named_like_our_own_tables(tmp_path: Path) -> None:
    names = {"id": "loan", "month": "k", "opened": "label", "owed": "m", "interest": "s", "matures": "l"}
    FRAME.rename(columns=names).assign(o=1, t="x", reason=0).to_csv(tmp_path / "l.csv", index=False)
    columns = {
        "loan": "loan",
        "period": "k",
        "origination": "label",
        "maturity": "l",
        "balance": "m",
        "rate": "s",
    }
    _same(read(tmp_path, "l.csv", columns=columns))


def test_identifiers_stay_text(tmp_path: Path) -> None:
    FRAME.to_csv(tmp_path / "l.csv", index=False)
    assert "007" in read(tmp_path, "l.csv").risk_set.loan_ids


def test_identifiers_of_numbers_lose_their_point_zero() -> None:
    rows = loan("1", "2020-01", "CD") + loan("2", "2020-01", "CC")
    frame = pd.DataFrame(rows)
    for ids in (frame["id"].astype(float), frame["id"].astype(int), frame["id"].astype(object)):
        data = prepare_loans(study(), base=Path("."), frame=frame.assign(id=ids))
        assert list(data.risk_set.loan_ids) == ["1", "2"]


def test_quoted_commas_and_newlines(tmp_path: Path) -> None:
    rows = [row | {"kind": 'a, "b"\nc'} for row in ROWS]
    pd.DataFrame(rows).to_csv(tmp_path / "l.csv", index=False)
    data = read(tmp_path, "l.csv", segments=["kind"])
    assert set(data.risk_set.static["kind"]) == {'a, "b"\nc'}


HEADER = ",".join(FRAME.columns)
BAD: dict[str, tuple[bytes, str]] = {
    "empty": (b"", "is empty"),
    "blank": (b"\n \n", "is empty"),
    "header only": (HEADER.encode() + b"\n", "has no rows"),
    "semicolons": (FRAME.to_csv(index=False, sep=";").encode(), "separated by semicolons"),
    "tabs": (FRAME.to_csv(index=False, sep="\t").encode(), "separated by tabs"),
    "binary": (b"\x00\x01\x02" * 100, "not a text file"),
    "zip": (b"PK\x03\x04\x14\x00" + bytes(50), "not a text file"),
    "latin": ("id,näme\n1,2\n".encode("latin-1"), "not UTF-8"),
    "latin further down": (
        HEADER.encode() + b"\n" + b"\xe4,2020-01,C,2020-01,2025-01,1,1\n" + b"x" * 70000,
        "UTF-8",
    ),
    "short line": (
        FRAME.to_csv(index=False).encode() + b"a,2020-01\n",
        "line 16: 2 fields where the header has 7",
    ),
    "long line": (
        FRAME.to_csv(index=False).encode() + b"a,b,c,d,e,f,g,h\n",
        "8 fields where the header has 7",
    ),
    "open quote": (HEADER.encode() + b'\n"a,2020-01,C,2020-01,2025-01,1,1\n', "quoted field does not end"),
    "no name": (b"id,,month\n1,2,3\n", "column 2 has no name"),
    "same name": (b"id,ID,month\n1,2,3\n", "same name"),
    "one long line": (b"x" * 100_000, "first line is longer"),
    "text": (b"Dear all,\nplease find enclosed\n", "column"),
}


@pytest.mark.parametrize("name", BAD)
def test_csv_that_cannot_be_used(tmp_path: Path, name: str) -> None:
    content, words = BAD[name]
    (tmp_path / "l.csv").write_bytes(content)
    with pytest.raises(DataError, match=words) as caught:
        read(tmp_path, "l.csv")
    _plain(caught.value)


def _plain(error: StresskitError) -> None:
    """Our words, the user's file name, nothing of the reader's own talk."""
    text = str(error)
    assert "l." in text
    for foreign in ("Error:", "strict_mode", "ignore_errors", "read_csv", "Possible", str(Path.cwd())):
        assert foreign not in text


@pytest.mark.parametrize("cut", ["text", "tail", "middle", "empty"])
def test_parquet_that_is_none(tmp_path: Path, cut: str) -> None:
    path = tmp_path / "l.parquet"
    pd.concat([FRAME] * 200).to_parquet(path)
    whole = path.read_bytes()
    damaged = {
        "text": b"id,month\n", "empty": b"", "tail": whole[: len(whole) // 2],
        "middle": whole[:8] + os.urandom(200) + whole[208:],
    }  # fmt: skip
    path.write_bytes(damaged[cut])
    with pytest.raises(DataError, match=r"l\.parquet") as caught:
        read(tmp_path, "l.parquet")
    _plain(caught.value)


def test_files_that_are_not_there(tmp_path: Path) -> None:
    FRAME.to_csv(tmp_path / "loans_2020.csv", index=False)
    (tmp_path / "empty").mkdir()
    for file, words in (
        ("loans.csv", r"no file or folder loans.csv.*There are: loans_2020.csv"),
        ("gone/loans.csv", "no file or folder"),
        ("*.parquet", "no .parquet or .csv file matches"),
        ("empty", "folder empty holds no"),
    ):
        with pytest.raises(DataError, match=words):
            read(tmp_path, file)
    (tmp_path / "loans.xlsx").write_bytes(b"PK")
    with pytest.raises(DataError, match=r"neither \.parquet nor \.csv"):
        read(tmp_path, "loans.xlsx")


def test_files_that_do_not_belong_together(tmp_path: Path) -> None:
    FRAME.to_csv(tmp_path / "a.csv", index=False)
    FRAME.drop(columns="owed").assign(due=1).to_csv(tmp_path / "b.csv", index=False)
    with pytest.raises(DataError, match=r"b\.csv lacks owed and also has due, compared with a\.csv"):
        read(tmp_path, "*.csv")
    (tmp_path / "b.csv").unlink()
    FRAME.to_parquet(tmp_path / "b.parquet")
    FRAME.drop(columns="owed").to_parquet(tmp_path / "c.parquet")
    with pytest.raises(DataError, match=r"^c\.parquet lacks owed, compared with b\.parquet"):
        read(tmp_path, "*.parquet")
    with pytest.raises(DataError, match=r"both \.csv and \.parquet"):
        read(tmp_path, ".")


def test_missing_columns_come_together_with_near_names(tmp_path: Path) -> None:
    FRAME.rename(columns={"month": "Month", "interest": "rate"}).to_csv(tmp_path / "l.csv", index=False)
    with pytest.raises(DataError) as caught:
        read(tmp_path, "l.csv", segments=["produkt"])
    text = str(caught.value)
    assert [p.code for p in caught.value.problems] == ["missing_column"] * 3
    assert "no column 'month' (loans.columns.period)" in text
    assert "Did you mean 'Month'?" in text
    assert "no column 'produkt' (loans.segments)" in text
    assert "it has: id, Month, state, opened, matures, owed, rate" in text


def test_dates_where_numbers_should_be(tmp_path: Path) -> None:
    _typed().to_parquet(tmp_path / "l.parquet")
    columns = {
        "loan": "id",
        "period": "month",
        "origination": "opened",
        "maturity": "matures",
        "balance": "opened",
        "rate": "interest",
    }
    with pytest.raises(DataError, match=r"column .opened. of l\.parquet holds TIMESTAMP.*expected numbers"):
        read(tmp_path, "l.parquet", columns=columns)


def test_empty_frame() -> None:
    with pytest.raises(DataError, match="has no rows"):
        prepare_loans(study(), base=Path("."), frame=FRAME.iloc[:0])


def test_infinite_and_missing_numbers_in_typed_columns() -> None:
    frame = FRAME.assign(owed=[np.inf, np.nan, *([1.0] * (len(FRAME) - 2))])
    data = prepare_loans(study(), base=Path("."), frame=frame)
    assert [(f.code, f.count) for f in data.findings] == [("unreadable_value", 1), ("missing_amount", 2)]


def test_nothing_is_loaded_and_nothing_stays_behind(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    with workspace("100MB") as work:
        settings = dict(work.connection.execute("SELECT name, value FROM duckdb_settings()").fetchall())
        assert settings["autoinstall_known_extensions"] == "false"
        assert settings["autoload_known_extensions"] == "false"
        assert settings["allow_community_extensions"] == "false"
        assert settings["memory_limit"].startswith("95.3")
        assert Path(settings["temp_directory"]).parent == work.folder
        assert work.folder.parent == tmp_path
    assert list(tmp_path.iterdir()) == []


def test_http_files_are_not_fetched(tmp_path: Path) -> None:
    with pytest.raises(DataError, match="no file or folder"):
        read(tmp_path, "https://example.org/loans.csv")


def test_want_of_memory_in_plain_words(tmp_path: Path) -> None:
    with pytest.raises(DataError, match=r"loans\.memory_limit"), within_means("l.csv"):
        with workspace("20MB") as work:
            work.connection.execute("SET max_temp_directory_size = '0KB'")
            work.connection.execute(
                "SELECT list(i::VARCHAR || repeat('x', 50)) FROM range(2000000) t(i)"
            ).fetchall()


def test_want_of_disk_in_plain_words() -> None:
    with pytest.raises(DataError, match="disk is full"), within_means("l.csv"):
        raise duckdb.IOException('IO Error: Could not write file "x": No space left on device')


def test_our_own_mistakes_are_not_blamed_on_the_file() -> None:
    source = Source("l.csv", {}, "l.csv", {}, {"l.csv": "l.csv"})
    with (
        pytest.raises(duckdb.BinderException),
        within_means("l.csv"),
        reading(source),
        workspace("50MB") as work,
    ):
        work.connection.execute("SELECT nothing FROM (SELECT 1 AS one)")


@pytest.mark.parametrize("kind", ["csv", "parquet"])
def test_glob_characters_in_real_names(tmp_path: Path, kind: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Folder and file, a glob over such a folder, and the folder for temporary files."""
    base = tmp_path / "a[b]" / "c*d"
    base.mkdir(parents=True)
    monkeypatch.setattr("tempfile.tempdir", str(base))
    name = f"l[1]?.{kind}"
    FRAME.to_csv(base / name, index=False) if kind == "csv" else FRAME.to_parquet(base / name)
    (base / f"l1x.{kind}").write_text("not a table")  # what the name as a pattern would match
    data = read(base, name)
    _same(data)
    assert list(data.digests) == [name]
    (base / f"l1x.{kind}").unlink()
    _same(read(base, f"*.{kind}"))


def test_errors_in_names_with_glob_characters(tmp_path: Path) -> None:
    (tmp_path / "l[1].csv").write_text(FRAME.to_csv(index=False) + "a,b\n")
    with pytest.raises(DataError, match=r"^l\[1\]\.csv, line 16: 2 fields"):
        read(tmp_path, "l[1].csv")


def test_columns_named_like_our_own_aliases(tmp_path: Path) -> None:
    names = {"id": "__number0", "state": "__loan", "month": "___loan", "opened": "__text1"}
    frame = FRAME.assign(kind="x").rename(columns=names | {"kind": "__text2"})
    frame.to_csv(tmp_path / "l.csv", index=False)
    frame.to_parquet(tmp_path / "l.parquet")
    columns = {
        "loan": "__number0", "period": "___loan", "origination": "__text1", "maturity": "matures", "balance": "owed",
        "rate": "interest",
    }  # fmt: skip
    outcome = {"column": "__loan", "default": ["D"], "payoff": ["P"]}
    for file in ("l.csv", "l.parquet"):
        _same(read(tmp_path, file, columns=columns, outcome=outcome, segments=["__text2"]))


def _as_counters() -> pd.DataFrame:
    """Whole numbers with holes are floats; ids, status, categories and truth likewise."""
    rows = [
        {"id": float(i), "month": float(t), "state": float(s), "opened": 5.0, "matures": 99.0, "owed": 1.0,
         "interest": 0.05, "kind": float(i), "sure": bool(i % 2)}
        for i in (1, 2) for t, s in ((5, 0), (6, 0), (7, i % 2))
    ]  # fmt: skip
    return pd.DataFrame([*rows, rows[0] | {"id": 3.0, "kind": None}])


@pytest.mark.parametrize("code", ["1", "1.0"])
@pytest.mark.parametrize("route", ["frame", "csv", "parquet", "parquet of text"])
def test_whole_floats_and_truth_are_the_same_by_every_route(tmp_path: Path, route: str, code: str) -> None:
    frame = _as_counters()
    loans = {
        "counter_starts": "2019-11", "segments": ["kind", "sure"], "outcome": {"column": "state", "default": [code]},
    }  # fmt: skip
    if route == "csv":
        frame.to_csv(tmp_path / "l.csv", index=False)
        written = (tmp_path / "l.csv").read_text()
        assert "1.0,5.0,0.0" in written
        assert "True" in written
        data = read(tmp_path, "l.csv", **loans)
    elif route.startswith("parquet"):
        frame = frame.astype(str).replace("nan", None) if route == "parquet of text" else frame
        frame.to_parquet(tmp_path / "l.parquet")
        data = read(tmp_path, "l.parquet", **loans)
    else:
        data = prepare_loans(study(loans=loans), base=Path("."), frame=frame)
    assert list(data.risk_set.loan_ids) == ["1", "2", "3"]
    assert [stay[2:] for stay in stays(data.risk_set)] == [(0, 3, 1), (0, 3, 0), (0, 1, 0)]
    assert list(data.risk_set.static["kind"]) == ["1", "2", "(missing)"]
    assert list(data.risk_set.static["sure"]) == ["true", "false", "true"]


ENDED = """
import os, signal, sys
from stresskit.panel.source import workspace
with workspace("100MB") as work:
    (work.folder / "staged.parquet").write_text("loans")
    os.kill(os.getpid(), signal.SIGTERM)
    print("still here")
"""


@pytest.mark.skipif(sys.platform == "win32", reason="there a process is ended without being asked")
def test_a_request_to_end_leaves_no_loan_data(tmp_path: Path) -> None:
    done = subprocess.run(
        [sys.executable, "-c", ENDED],
        env=os.environ | {"TMPDIR": str(tmp_path)},
        capture_output=True,
        text=True,
    )
    assert (done.returncode, done.stdout) == (143, "")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.slow
def test_two_million_rows_within_500_megabytes(tmp_path: Path) -> None:
    """Counts against numpy; a loan is 40 months, one in four seen late, one row in 997 a default."""
    n, per = 50_000, 40
    loans, step = np.repeat(np.arange(n), per), np.tile(np.arange(per), n)
    late = loans % 4 == 0
    month = (np.datetime64("2017-03", "M") + step).astype("datetime64[D]")
    default = (loans * per + step) % 997 == 5
    frame = pd.DataFrame({
        "id": loans, "month": month, "opened": np.where(late, np.datetime64("2016-01-01"), np.datetime64("2017-03-01")),
        "matures": np.datetime64("2030-01-01"), "owed": 100.25, "interest": 0.05, "kind": loans % 3,
        "state": np.where(default, "D", "C"), "score": (loans * 7919 % 1000) / 8.0,
    })  # fmt: skip
    frame.to_parquet(tmp_path / "l.parquet")
    hazards = {
        "default": {"terms": [{"age": "linear"}, {"loan": "score"}, {"loan": "kind", "as": "category"}]}
    }
    loan_part = {"file": "l.parquet", "memory_limit": "500MB", "segments": ["kind"]}
    data = prepare_loans(study(as_of="2020-06", loans=loan_part, hazards=hazards), base=tmp_path)

    first = np.full(n, per)
    hits = np.flatnonzero(default)
    np.minimum.at(first, hits // per, hits % per)
    after = np.maximum(per - 1 - first, 0)
    entry = n // 4
    assert left_out(data) == {"after_event": int(after.sum()), "entry_row": entry}
    in_entry = int(((first == 0) & (np.arange(n) % 4 == 0)).sum())
    assert data.risk_set.events("default") == int((first < per).sum()) - in_entry
    assert data.risk_set.n_rows == n * per - int(after.sum()) - entry
    assert data.portfolio.n_loans == int((first == per).sum())
    assert data.reconciliation.loc[0, "balance"] == 100.25 * n * per
    order = np.argsort(np.arange(n).astype(str), kind="stable")
    used = np.isin(order.astype(str), data.risk_set.loan_ids.astype(str))
    np.testing.assert_array_equal(data.risk_set.static["score"], (order[used] * 7919 % 1000) / 8.0)
