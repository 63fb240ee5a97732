from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import array_shapes, arrays

from condyle.recording import Event, Recording, describe, marker_spread, report_lines
from condyle.recording.gaps import find_gaps


def recording() -> Recording:
    positions = np.tile(np.array([[0.0, 1.0, 0.0], [0.0, 2.5, 0.0], [0.1, 1.0, 0.2]]), (10, 1, 1))
    positions[2:4, 1] = positions[7:, 1] = np.nan
    positions[:, 2] = np.nan
    return Recording(
        name="t",
        source="t.c3d",
        rate=50.0,
        first_frame=7,
        labels=("heel", "toe", "*3"),
        positions=positions,
        residuals=np.full((10, 3), np.nan),
        cameras=np.zeros((10, 3), dtype=np.int64),
        up="+Y",
        units="mm",
        remarks=("Something was dropped.",),
        events=(Event(0.1, "reach"),),
    )


def test_a_report_counts_what_is_there() -> None:
    report = describe(recording())
    assert (report.frames, report.first_frame, report.duration) == (10, 7, 0.2)
    seen = [(m.label, m.present, m.gaps, m.longest_gap) for m in report.markers]
    assert seen == [("heel", 1.0, 0, 0), ("toe", 0.5, 2, 3), ("*3", 0.0, 1, 10)]
    assert report.unnamed == ("*3",)
    assert report.spread == pytest.approx(1.5)


def test_a_report_is_plain_json() -> None:
    back = json.loads(json.dumps(describe(recording()).as_dict(), allow_nan=False))
    assert back["markers"][1] == {"label": "toe", "present": 0.5, "gaps": 2, "longest_gap": 3}
    assert back["events"] == [{"time": 0.1, "label": "reach"}]


def test_the_text_says_everything_that_the_report_says() -> None:
    text = "\n".join(report_lines(describe(recording())))
    for words in (
        "10, numbered 7 to 16",
        "50 Hz",
        "mm",
        "+Y",
        "toe",
        "50.0 %",
        "2 gaps, longest 3",
    ):
        assert words in text
    for words in ("reach 0.10 s", "without a name: *3", "note: Something was dropped."):
        assert words in text


def test_a_share_below_one_is_never_written_as_100_per_cent() -> None:
    positions = np.ones((5000, 1, 3))
    positions[0] = np.nan
    trial = Recording(
        "t", "t", 100.0, 1, ("heel",), positions, positions[..., 0], np.zeros((5000, 1), np.int64)
    )
    assert any("99.9 %" in line for line in report_lines(describe(trial)))


@given(arrays(np.bool_, array_shapes(min_dims=2, max_dims=2, max_side=12)))
def test_gaps_cover_exactly_the_missing_frames(present: np.ndarray) -> None:
    gaps = find_gaps(present)
    rebuilt = np.ones_like(present)
    for marker, start, length in zip(gaps.marker, gaps.start, gaps.length, strict=True):
        assert rebuilt[start : start + length, marker].all()
        rebuilt[start : start + length, marker] = False
        assert start == 0 or present[start - 1, marker]
    assert (rebuilt == present).all()


@given(scale=st.floats(0.1, 1000.0), seed=st.integers(0, 100))
def test_the_spread_grows_with_the_unit_and_not_with_the_way_walked(
    scale: float, seed: int
) -> None:
    rng = np.random.default_rng(seed)
    places = rng.normal(size=(1, 6, 3)) + np.zeros((9, 1, 1))
    walked = places + np.arange(9)[:, None, None] * 5.0
    assert marker_spread(walked * scale) == pytest.approx(marker_spread(places) * scale)
