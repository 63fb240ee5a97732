"""Wide tables in CSV and Parquet: what is read, what is decided, and what is refused with which words."""

from __future__ import annotations

import resource
import subprocess
import sys
import textwrap
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from condyle.model.errors import RecordingError
from condyle.recording import describe, read_recording, read_table, report_lines

HEAD = "time,heel.x,heel.y,heel.z\n"
ROWS = "0,1,2,3\n0.01,,,\n0.02,4,5,6\n"


def write(tmp_path: Path, text: str | bytes, name: str = "t.csv") -> Path:
    path = tmp_path / name
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def complaint(path: Path) -> str:
    with pytest.raises(RecordingError) as caught:
        read_recording(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: ")
    assert "\n" not in text
    return text.removeprefix(f"{path}: ")


def complaint_about(tmp_path: Path, text: str | bytes) -> str:
    return complaint(write(tmp_path, text))


def wide(positions: np.ndarray, rate: float, first: int = 1) -> pd.DataFrame:
    """A frame and a time column, then three columns a marker."""
    frames, markers = positions.shape[:2]
    number = np.arange(first, first + frames)
    columns = [f"m{i}.{axis}" for i in range(markers) for axis in "xyz"]
    table = pd.DataFrame(positions.reshape(frames, -1), columns=columns)
    table.insert(0, "time", (number - 1) / rate)
    table.insert(0, "frame", number)
    return table


def person(frames: int = 30, markers: int = 4) -> np.ndarray:
    """Metres: a walk of invented markers with gaps."""
    rng = np.random.default_rng(3)
    positions = rng.uniform(0, 1.7, (1, markers, 3)) + rng.normal(0, 0.01, (frames, markers, 3))
    positions[rng.random((frames, markers)) < 0.2] = np.nan
    return positions


def test_a_table_becomes_metres_and_seconds_with_nan_where_cells_are_empty(tmp_path: Path) -> None:
    trial = read_recording(write(tmp_path, HEAD + ROWS), units="mm")
    np.testing.assert_allclose(
        trial.positions[:, 0], np.array([[1, 2, 3], [np.nan] * 3, [4, 5, 6]]) / 1000
    )
    assert (trial.labels, trial.rate, trial.first_frame, trial.units) == (("heel",), 100.0, 1, "mm")
    np.testing.assert_allclose(trial.time, [0, 0.01, 0.02])
    assert report_lines(describe(trial))[1].strip() == "frames       3, numbered 1 to 3"


@pytest.mark.parametrize("ending", ["csv", "parquet"])
def test_what_pandas_writes_comes_back(tmp_path: Path, ending: str) -> None:
    positions = person()
    table = wide(1000 * positions, rate=150, first=12)
    path = tmp_path / f"t.{ending}"
    if ending == "csv":
        table.to_csv(path, index=False)
    else:
        table.to_parquet(path)
    trial = read_recording(path)
    np.testing.assert_allclose(trial.positions, positions, atol=1e-12)
    assert (trial.rate, trial.first_frame, trial.units) == (150.0, 12, "mm")
    np.testing.assert_allclose(trial.time, table["time"], atol=1e-12)
    assert [remark.split(" (")[0] for remark in trial.remarks] == [
        "The file declares no unit of length: taken as mm"
    ]


@settings(max_examples=40, deadline=None)
@given(
    rate=st.sampled_from([25, 29.97, 50, 59.94, 100, 119.88, 120, 150, 200, 240, 1000]),
    first=st.integers(1, 20_000),
    frames=st.integers(2, 400),
    decimals=st.sampled_from([4, 5, 6, 9, 17]),
)
def test_times_give_back_the_rate_and_the_frame_numbers_that_made_them(
    tmp_path_factory: pytest.TempPathFactory, rate: float, first: int, frames: int, decimals: int
) -> None:
    table = wide(np.ones((frames, 1, 3)), rate, first).drop(columns="frame")
    table["time"] = table["time"].round(decimals)
    path = tmp_path_factory.mktemp("t") / "t.csv"
    table.to_csv(path, index=False)
    trial = read_table(path, units="m")
    unit = 10.0**-decimals
    assert trial.rate == pytest.approx(rate, rel=1.01 * rate * (unit + 1e-12) / (frames - 1))
    # a frame number is only as sure as the rate that counts it from the clock's zero
    assert np.abs(trial.time[0] - table["time"][0]) < 0.5 / rate + unit
    if first < 100 and decimals > 5:
        assert trial.first_frame == first


def test_a_rate_written_with_few_decimals_is_still_found(tmp_path: Path) -> None:
    table = wide(np.ones((500, 1, 3)), 150).drop(columns="frame")
    table["time"] = table["time"].round(3)
    path = tmp_path / "t.csv"
    table.to_csv(path, index=False)
    trial = read_table(path, units="m")
    assert trial.rate == 150
    assert "The times are written to 0.001 s" in trial.remarks[0]


def test_a_clock_that_starts_elsewhere_is_told(tmp_path: Path) -> None:
    rows = "frame," + HEAD + "7,3.20,0,1,2\n8,3.21,0,1,3\n"
    trial = read_table(write(tmp_path, rows), units="m")
    assert trial.frame.tolist() == [7, 8]
    np.testing.assert_allclose(trial.time, [0.06, 0.07])
    assert (
        "starts at 3.2 s; here time is (frame - 1) / rate, so frame 7 is at 0.06 s"
        in trial.remarks[0]
    )
    trial = read_table(write(tmp_path, HEAD + "3.20,0,1,2\n3.21,0,1,3\n"), units="m")
    assert trial.first_frame == 321
    np.testing.assert_allclose(trial.time, [3.20, 3.21])
    trial = read_table(write(tmp_path, "frame," + HEAD + "0,0,0,1,2\n1,0.01,0,1,3\n"), units="m")
    assert trial.first_frame == 1
    assert trial.remarks == ("The file counts its frames from 0; here the first is 1.",)


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        ("0,1,1,1\n0.01,1,1,1\n0.01,1,1,1\n", "line 4 (0.01 s) repeats the time of line 3"),
        ("0,1,1,1\n\n0.02,1,1,1\n0.01,1,1,1\n", "line 5 (0.01 s) is earlier than line 4 (0.02 s)"),
        ("0,1,1,1\n.1,1,1,1\n.2,1,1,1\n.4,1,1,1\n", "line 5 comes 0.2 s after the row before it"),
        ("0,1,1,1\n,1,1,1\n", "line 3 has no time"),
        ("0,1,1,1\nnan,1,1,1\n", "line 3 has no time"),
    ],
)
def test_irregular_times_are_refused_with_their_line(tmp_path: Path, rows: str, words: str) -> None:
    assert words in complaint_about(tmp_path, HEAD + rows)


def test_a_step_may_differ_by_one_per_cent_and_no_more(tmp_path: Path) -> None:
    time = np.arange(50) * 0.01
    for share, fine in ((0.009, True), (0.011, False)):
        late = time.copy()
        late[20:] += share * 0.01
        text = HEAD + "".join(f"{t:.9f},1,2,3\n" for t in late)
        if fine:
            assert read_table(write(tmp_path, text), units="m").rate == pytest.approx(100, rel=1e-3)
        else:
            assert "line 22 comes" in complaint_about(tmp_path, text)


@pytest.mark.parametrize(
    ("frames", "words"),
    [
        ("1,3", "line 3 is frame 3 after frame 1"),
        ("1,", "line 3 has no whole frame number"),
        ("1,1.5", "line 3 has no whole frame number"),
    ],
)
def test_frame_numbers_count_on_by_one(tmp_path: Path, frames: str, words: str) -> None:
    first, second = frames.split(",")
    rows = f"frame,{HEAD}{first},0,1,1,1\n{second},.01,1,1,1\n"
    assert words in complaint_about(tmp_path, rows)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("time,a.x,a.y,b.z\n0,1,1,1\n", "a.x, a.y, b.z are there without a.z, b.x, b.y; a marker needs"),
        ("a.x,a.y,a.z\n1,1,1\n", "it has no column 'time'"),
        ("frame,a.x,a.y,a.z\n1,1,1,1\n", "a frame number alone tells no rate"),
        ("time,knee\n1,1\n", "none of its 2 columns is a marker's"),
        ("time,a.x,a.x,a.y,a.z\n0,1,1,1,1\n", "columns 2 and 3 are both 'a.x'"),
        ("time,TIME,a.x,a.y,a.z\n0,1,1,1,1\n", "columns 1 and 2 are both 'TIME'"),
        ("time [ms],a.x,a.y,a.z\n0,1,1,1\n", "its times are in 'ms'; convert them to seconds"),
        ("time,a.x [ft],a.y [ft],a.z [ft]\n0,1,1,1\n", "'a.x [ft]' is in a unit that is not known"),
        ("time,a.x [mm],a.y [m],a.z [m]\n0,1,1,1\n", "'a.x [mm]' and 'a.y [m]' differ in unit"),
        ("time a.x a.y a.z\n0 1 1 1\n", "separate its columns by commas, semicolons or tabs"),
        (HEAD, "it has headings but no frames"),
        (HEAD.strip(), "it has headings but no frames"),
        ("", "the file is empty"),
        ("\n\n", "it holds no headings"),
        ("\ufeff", "it holds no headings"),
        (HEAD.encode("utf-16"), "its headings are not text in UTF-8"),
        ("time,kn\xe9.x\n".encode("latin-1"), "its headings are not text in UTF-8"),
        ("time,\0.x\n", "its headings are not text in UTF-8"),
        (HEAD + "0,1,2,high\n", "line 2, column 'heel.z': 'high' is not a number; write a number"),
        (HEAD + "0,1,2,3\n\n1,1,x,y\n", "line 4, column 'heel.y': 'x' is not a number"),
        (HEAD + "now,1,2,3\n", "line 2, column 'time': 'now' is not a number"),
        (HEAD + "0,1,2,3\n0.01,1,2\n", "line 3 has 3 cells where the headings have 4"),
        (HEAD + "0,0,1,2,3\n", "line 2 has 5 cells where the headings have 4"),
        (HEAD + '"0,01",1,2,3\n', "line 2, column 'time': '0,01' is not a number"),
        (HEAD.replace(",", ";") + "0,1;1.5;2;3\n", "line 2, column 'heel.x': '1.5' is not a number"),
        (HEAD.replace(",", ";") + "0;1.000,5;2,5;3\n", "'1.000,5' is not a number"),
        (HEAD.encode() + b"0,1,\xff,3\n", "line 2, column 'heel.y': '\\udcff' is not a number"),
    ],
)  # fmt: skip
def test_what_is_no_table_is_refused_in_one_line(
    tmp_path: Path, text: str | bytes, words: str
) -> None:
    assert words in complaint_about(tmp_path, text)


@pytest.mark.parametrize(
    "text",
    [
        HEAD + ROWS,
        "\ufeff" + HEAD + ROWS,
        (HEAD + ROWS).replace("\n", "\r\n"),
        (HEAD + ROWS).replace("\n", "\r"),
        (HEAD + ROWS).replace(",", ";"),
        (HEAD + ROWS).replace(",", "\t"),
        (HEAD + ROWS).replace(",", ";").replace(".0", ",0"),
        "# made by hand\n# units: mm\n\n" + HEAD + ROWS,
        '"time","heel.x","heel.y","heel.z"\n' + ROWS.replace(",,,", ",NaN,nan,"),
        HEAD.upper().replace("HEEL", "heel").replace(",", " , ") + ROWS + "\n\n",
        "time,note,heel.z [mm],heel.y [mm],heel.x [mm]\n0,\xe9,3,2,1\n.01,,,,\n.02,,6,5,4\n".encode(
            "latin-1"
        ).replace(b"\xe9,3", b"\xff,3"),
    ],
)
def test_one_table_may_be_written_in_many_ways(tmp_path: Path, text: str | bytes) -> None:
    trial = read_table(write(tmp_path, text), units="mm")
    wanted = np.array([[1, 2, 3], [np.nan] * 3, [4, 5, 6]]) / 1000
    np.testing.assert_allclose(trial.positions[:, 0], wanted)
    assert (trial.rate, trial.labels) == (100.0, ("heel",))


def test_the_unit_asked_for_wins_then_the_declared_then_the_spread(tmp_path: Path) -> None:
    row = "0,1,1,1\n"
    declared = write(tmp_path, "time,a.x [cm],a.y [cm],a.z [cm]\n" + row)
    assert read_table(declared).positions[0, 0, 0] == pytest.approx(0.01)
    asked = read_table(declared, units="m")
    assert asked.positions[0, 0, 0] == 1.0
    assert "The file declares the unit 'cm': taken as m" in asked.remarks[-1]
    said = read_table(write(tmp_path, "# unit = mm\ntime,a.x,a.y,a.z\n" + row))
    assert said.positions[0, 0, 0] == pytest.approx(0.001)
    for scale, unit in ((1.0, "m"), (1000.0, "mm")):
        path = tmp_path / "spread.csv"
        wide(scale * person(), 100).to_csv(path, index=False)
        assert read_table(path).units == unit
    with pytest.raises(RecordingError, match=r"no unit of length is called 'ft'; give one of mm"):
        read_table(path, units="ft")


def test_parquet_metadata_declares_the_unit(tmp_path: Path) -> None:
    table = wide(person(), 100)
    path = tmp_path / "t.parquet"
    table.attrs["units"] = "mm"
    table.to_parquet(path)
    assert read_table(path).units == "mm"
    arrow = pa.Table.from_pandas(wide(person(), 100)).replace_schema_metadata({"units": "cm"})
    pq.write_table(arrow, path)
    assert read_table(path).units == "cm"


def test_a_given_unit_wins_over_a_c3d_too(make_c3d: Callable[..., bytes], tmp_path: Path) -> None:
    path = write(tmp_path, make_c3d(np.ones((2, 2, 3)), units="mm"), "t.c3d")
    trial = read_recording(path, units="m")
    assert (trial.units, trial.positions[0, 0, 0]) == ("m", 1.0)
    assert "The file declares the unit 'mm': taken as m, as asked for by --units." in trial.remarks
    assert read_recording(path).positions[0, 0, 0] == pytest.approx(0.001)


def test_other_columns_and_partial_positions_are_said(tmp_path: Path) -> None:
    text = "time,a.x,a.y,a.z,force,note\n0,1,,1,9,ok\n.1,0,0,0,9,\n.2,inf,1,1,9,\n.3,1,1,1,9,\n"
    trial = read_table(write(tmp_path, text), units="m")
    assert trial.present[:, 0].tolist() == [False, True, False, True]
    said = " ".join(trial.remarks)
    assert "1 positions with infinite" in said
    assert "2 positions lack one or two" in said
    assert "1 positions are exactly 0, 0, 0 and were kept" in said
    assert "left out: force, note." in said


def test_prefixes_and_dots_in_names_are_kept_apart(tmp_path: Path) -> None:
    text = "time,S:a.x,S:a.y,S:a.z,b.1.x,b.1.y,b.1.z\n0,1,1,1,2,2,2\n"
    assert read_table(write(tmp_path, text)).labels == ("a", "b.1")


def test_content_wins_over_the_name(make_c3d: Callable[..., bytes], tmp_path: Path) -> None:
    table = tmp_path / "odd.csv"
    wide(person(), 100).to_parquet(table)
    assert len(read_recording(table)) == 30
    assert len(read_recording(write(tmp_path, make_c3d(np.ones((2, 2, 3))), "c.csv"))) == 2
    assert "not a Parquet file" in complaint(write(tmp_path, HEAD + ROWS, "t.parquet"))
    assert read_recording(write(tmp_path, "TP.x,TP.y,TP.z,time\n1,1,1,0\n")).labels == ("TP",)


def test_parquet_types_that_are_no_numbers_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "t.parquet"
    table = wide(person(3, 1), 100)
    table.assign(**{"m0.y": "high"}).to_parquet(path)
    assert "column 'm0.y' holds" in complaint(path)
    pq.write_table(pa.table({"time": [0.0], "a": [{"x": 1.0}]}), path)
    assert "none of its 2 columns is a marker's" in complaint(path)
    table.astype(np.float32).assign(**{"m0.x": [1, 2, 3]}).to_parquet(path)
    assert read_table(path, units="m").positions[:, 0, 0].tolist() == [1.0, 2.0, 3.0]
    table.iloc[:0].to_parquet(path)
    assert "no frames" in complaint(path)


def test_too_many_columns_or_rows_are_refused_at_once(tmp_path: Path) -> None:
    names = ",".join(f"m{i}.{axis}" for i in range(333_334) for axis in "xyz")
    assert "give" in complaint_about(tmp_path, f"time,{names}\n")
    short = ",".join("abc" for _ in range(1_000_000))
    assert "it has 1000000 columns; give at most 30000" in complaint_about(tmp_path, short + "\n")
    path = tmp_path / "t.parquet"
    rows = 10_000_000  # 160 MB of numbers claimed by a file of a few kilobytes
    zeros = pa.DictionaryArray.from_arrays(pa.array(np.zeros(rows, np.int8)), pa.array([0.0]))
    pq.write_table(pa.table({f"m{i}.x": zeros for i in range(16)}), path)
    assert "it claims 10000000 rows of 16 columns" in complaint(path)


FUZZ = """
import resource, sys
from pathlib import Path
import numpy as np
from condyle.model.errors import RecordingError
from condyle.recording import describe, read_recording, report_lines

folder = Path(sys.argv[1])
ending = sys.argv[2]
whole = [(folder / f"{name}.{ending}").read_bytes() for name in "ab"]
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
refused = 0
for seed in range(int(sys.argv[3])):
    rng = np.random.default_rng(seed)
    data = bytearray(whole[seed % 2])
    for _ in range(rng.integers(1, 4)):
        low = 0 if rng.random() < 0.5 else max(0, len(data) - 2000)  # the footer
        choices = b'\\0\\x01\\x7f\\x80\\xff,;\\n\\r\\t"-.e#x9'
        place = rng.integers(low, len(data))
        byte = choices[rng.integers(len(choices))] if rng.random() < 0.7 else rng.integers(256)
        if rng.random() < 0.8:
            data[place] = byte
        else:
            data.insert(place, byte)
    if rng.random() < 0.1:
        data = data[: rng.integers(len(data))]
    path = folder / f"mutant.{ending}"
    path.write_bytes(data)
    try:
        report_lines(describe(read_recording(path)))
    except RecordingError as fault:
        assert "\\n" not in str(fault)
        refused += 1
grown = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before
print(refused, grown)
"""

MUTATIONS = 200


@pytest.mark.parametrize("ending", ["csv", "parquet"])
def test_mutated_tables_are_read_or_refused_and_nothing_else(tmp_path: Path, ending: str) -> None:
    for name, compression in (("a", "snappy"), ("b", "zstd")):
        table = wide(1000 * person(), 100)
        path = tmp_path / f"{name}.{ending}"
        if ending == "csv":
            table.round(3).to_csv(path, index=False, sep="," if name == "a" else ";")
        else:
            table.to_parquet(path, compression=compression)
    # a process of its own, so that a crash of the library is a failure and not the end of the run
    done = subprocess.run(
        [sys.executable, "-c", textwrap.dedent(FUZZ), str(tmp_path), ending, str(MUTATIONS)],
        capture_output=True,
        text=True,
        timeout=240,
        check=False,
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_AS, (4 * 2**30, 4 * 2**30)),
    )
    assert done.returncode == 0, f"exit {done.returncode}: {done.stderr[-500:]}"
    refused, grown = map(int, done.stdout.split())
    assert 0 < refused < MUTATIONS
    assert grown < 400_000  # kB


@pytest.mark.real
def test_a_real_table_holds_what_its_notes_say(real_data: Path) -> None:
    trial = read_recording(real_data / "arm-hand" / "reach.csv")
    assert (len(trial.labels), len(trial), trial.rate, trial.units) == (21, 3000, 100.0, "mm")
    assert trial.first_frame == 1
    first = trial.labels.index("hand_top")
    np.testing.assert_allclose(trial.positions[0, first], [0.110406, 0.135075, 0.460584])
    by_pandas = pd.read_csv(real_data / "arm-hand" / "reach.csv")
    assert (~trial.present).sum() == by_pandas.filter(regex=r"\.x$").isna().to_numpy().sum() > 0
    names = [f"{label}.{axis}" for label in trial.labels for axis in "xyz"]
    wanted = by_pandas[names].to_numpy().reshape(3000, 21, 3) / 1000
    np.testing.assert_allclose(trial.positions, wanted, atol=1e-12)
    np.testing.assert_allclose(trial.time, by_pandas["time"], atol=1e-9)
