"""Readings CSV: good files are read whole, bad rows are named and kept aside, nothing is guessed."""

from __future__ import annotations

import io
import math
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from companion.book.files import FileFault, aside
from companion.book.readings import FROM_FILE, frame_of, read_csv, write_readings


@pytest.fixture
def file(tmp_path: Path):
    def write(text: str) -> Path:
        path = tmp_path / "r.csv"
        path.write_text(text)
        return path

    return write


def test_a_good_file_is_read_whole(file) -> None:
    frame, rejects = read_csv(
        file("time,raw,temperature_degC,barometer_Pa\n2026-03-01T00:00:00Z,6553,11.5,\n2026-03-01T00:01:00Z,6560,,98000\n")
    )
    assert frame["raw"].tolist() == [6553.0, 6560.0]
    assert frame["temperature_c"].tolist()[0] == 11.5 and math.isnan(frame["temperature_c"].tolist()[1])
    assert frame["time"].iloc[1] == pd.Timestamp("2026-03-01T00:01:00Z")
    assert (frame["life"] == FROM_FILE).all()
    assert not rejects.rows


@pytest.mark.parametrize(
    ("text", "same"),
    [
        ("2026-03-29T03:30:00+02:00", "2026-03-29T01:30:00Z"),  # the examples of RFC 3339, 5.8, in form
        ("2026-03-01T12:00:27.87+00:20", "2026-03-01T11:40:27.87Z"),
        ("2026-03-01t12:00:00z", "2026-03-01T12:00:00Z"),
        ("2026-03-01 12:00:00Z", "2026-03-01T12:00:00Z"),
    ],
)
def test_every_form_of_rfc_3339_is_read(file, text: str, same: str) -> None:
    frame, rejects = read_csv(file(f"time,raw\n{text},1\n"))
    assert not rejects.rows
    assert frame["time"].iloc[0] == pd.Timestamp(same)


@pytest.mark.parametrize(
    ("row", "reason"),
    [
        ("2026-03-01T00:05:00,7000", "has no zone; write it as 2026-03-01T00:05:00Z"),
        ("2026-03-01,7000", "has no zone"),
        ("01/03/2026 00:05,7000", "is not RFC 3339"),
        ("2026-02-30T00:05:00Z,7000", "is not on the calendar"),
        ("2026-03-01T00:05:00Z,seven", "raw 'seven' is not a number"),
        ("2026-03-01T00:05:00Z,", "raw is missing"),
        ("2026-03-01T00:05:00Z,NaN", "raw is missing"),
        ("2026-03-01T00:05:00Z,inf", "is not finite"),
        ("2026-03-01T00:05:00Z,70000", "beyond the converter's 0 to 65535"),
        ("2026-03-01T00:05:00Z,-1", "beyond the converter's 0 to 65535"),
        ("2026-03-01T00:05:00Z,7000,8000", "3 values, but the header names 2"),
        ("2026-03-01T00:00:00Z,7000", "line 2 has another reading of this time"),
    ],
)
def test_a_bad_row_is_named_and_the_good_ones_are_kept(file, tmp_path: Path, row: str, reason: str) -> None:
    path = file(f"time,raw\n2026-03-01T00:00:00Z,6553\n{row}\n2026-03-01T00:10:00Z,6560\n")
    frame, rejects = read_csv(path, limits=(0, 65535))
    assert frame["raw"].tolist() == [6553.0, 6560.0]
    [(line, why, text)] = rejects.rows
    assert line == 3 and reason in why and text == row
    rejects.write(tmp_path / "rejects.csv")
    kept = pd.read_csv(tmp_path / "rejects.csv")
    assert kept["line"].tolist() == [3] and kept["row"].tolist() == [row]


def test_a_row_said_twice_counts_once(file) -> None:
    frame, rejects = read_csv(file("time,raw\n2026-03-01T00:00:00Z,6553\n2026-03-01T00:00:00Z,6553\n"))
    assert len(frame) == 1 and rejects.repeated == 1 and not rejects.rows


def test_rows_out_of_order_are_sorted_and_told(file) -> None:
    frame, rejects = read_csv(file("time,raw\n2026-03-01T00:10:00Z,2\n2026-03-01T00:00:00Z,1\n"))
    assert frame["raw"].tolist() == [1.0, 2.0] and rejects.out_of_order == 1


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("", "must name time and raw"),
        ("when,raw\n", "unknown column 'when'"),
        ("time,counts\n", "unknown column 'counts'"),
        ("time,raw,barometer_hPa\n", "did you mean barometer_Pa?"),
        ("time,temperature_degC\n", "must name time and raw"),
        ("time,raw,raw\n", "named twice"),
        ("time,raw,life\n", "life and seq stand together"),
        ("time,raw [mA]\n", "the sensor sends counts"),
        ("time;raw\n", "separated by semicolons; save the file with commas"),
    ],
)
def test_a_wrong_header_is_one_clear_error(file, text: str, fault: str) -> None:
    with pytest.raises(FileFault, match=r"r\.csv: line 1: ") as told:
        read_csv(file(text))
    assert fault in str(told.value) and "\n" not in str(told.value)


def test_a_file_that_is_no_text_is_one_clear_error(tmp_path: Path) -> None:
    (tmp_path / "r.csv").write_bytes(b"time,raw\n\xff\xfe\n")
    with pytest.raises(FileFault, match="not UTF-8"):
        read_csv(tmp_path / "r.csv")
    with pytest.raises(FileFault, match="cannot be read"):
        read_csv(tmp_path / "none.csv")


def test_milliamperes_are_named_in_the_header_and_never_guessed(file) -> None:
    frame, _ = read_csv(file("time,raw [mA]\n2026-03-01T00:00:00Z,12.5\n"), "current")
    assert frame["raw"].tolist() == pytest.approx([0.0125])
    frame, rejects = read_csv(file("time,raw\n2026-03-01T00:00:00Z,12.5\n"), "current")
    assert frame.empty and "write `raw [mA]`" in rejects.rows[0][1]


def test_line_ends_and_byte_order_marks_of_other_systems_are_read(tmp_path: Path) -> None:
    (tmp_path / "r.csv").write_bytes(
        b"\xef\xbb\xbftime,raw,temperature_degC\r\n2026-03-01T00:00:00Z,1,9.5\r\n2026-03-01T00:01:00Z,2,\r\n"
    )
    frame, rejects = read_csv(tmp_path / "r.csv")
    assert frame["raw"].tolist() == [1.0, 2.0] and frame["temperature_c"][0] == 9.5 and not rejects.rows


def test_standard_input_is_read(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("sys.stdin", io.TextIOWrapper(io.BytesIO(b"time,raw\n2026-03-01T00:00:00Z,1\n")))
    frame, rejects = read_csv("-")
    assert frame["raw"].tolist() == [1.0] and rejects.source == "standard input"


numbers = st.one_of(st.just(math.nan), st.floats(-1e9, 1e9), st.integers(-(2**31), 2**31).map(float))


@given(
    st.lists(
        st.tuples(st.integers(0, 10**9), st.integers(0, 2**24), numbers, numbers), min_size=1, unique_by=lambda row: row[0]
    )
)
def test_what_is_written_reads_back_the_same(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[int, int, float, float]]
) -> None:
    path = tmp_path_factory.getbasetemp() / "back.csv"
    rows.sort()
    seconds, raw, temperature, barometer = (list(column) for column in zip(*rows, strict=True))
    times = np.array(seconds, "datetime64[s]")
    frame = frame_of(times, raw, life="a1", seq=range(len(rows)), temperature_c=temperature, barometer_pa=barometer)
    write_readings(path, frame)
    back, rejects = read_csv(path)
    assert not rejects.rows
    pd.testing.assert_frame_equal(back, frame)


def test_the_quick_way_and_the_careful_way_agree(file) -> None:
    rows = "".join(f"2026-03-01T00:{n // 60:02d}:{n % 60:02d}Z,{6553 + n},{n / 7!r},\n" for n in range(300))
    text = "time,raw,temperature_degC,barometer_Pa\n" + rows
    quick, _ = read_csv(file(text))
    careful, rejects = read_csv(file(text + "2026-03-01T01:00:00,1,,\n"))  # one bad row sends the whole file the careful way
    assert len(rejects.rows) == 1
    pd.testing.assert_frame_equal(quick, careful)


def test_an_output_that_fails_leaves_the_old_file_whole(tmp_path: Path) -> None:
    path = tmp_path / "out.csv"
    path.write_text("old")
    with pytest.raises(RuntimeError), aside(path) as out:
        out.write("half of the new")
        raise RuntimeError
    assert path.read_text() == "old"
    assert [entry.name for entry in tmp_path.iterdir()] == ["out.csv"]
