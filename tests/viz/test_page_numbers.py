"""What travels inside a page comes out again, and what stands out is found."""

from __future__ import annotations

import base64
import gzip
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from condyle.solver.results import FittedMotion
from condyle.viz.episodes import bridge_rows, exchanged, far_off, stretches
from condyle.viz.packing import Package
from condyle.viz.page_bones import MOST_FACES, lighter
from condyle.viz.page_findings import page_findings
from condyle.viz.shapes import Ball, skin
from condyle.viz.shown_trial import read_shown_trial

sys.path.insert(0, str(Path(__file__).parent))
from page_trials import UNSEEN, exchange, longer, write_trial


def unpacked(package: Package, name: str) -> NDArray[np.float64]:
    """An independent reader of the packing, as plain as can be."""
    data, entry = gzip.decompress(base64.b64decode(package.base64())), package.directory[name]
    count, length = entry["channels"], entry["length"]
    total = count * length
    planes = np.frombuffer(data, np.uint8, total * entry["width"], entry["at"])
    folded = sum(
        planes[i * total : (i + 1) * total].astype(np.int64) << (8 * i)
        for i in range(entry["width"])
    )
    steps = np.where(folded % 2, -(folded + 1) // 2, folded // 2).reshape(count, length)
    for _ in range(entry["order"]):
        steps = np.cumsum(steps, axis=1)
    values = (steps + np.array(entry["start"])[:, None]) * entry["step"]
    if "missing" in entry:
        bits = np.frombuffer(data, np.uint8, -(-total // 8), entry["missing"])
        values[np.unpackbits(bits, count=total).reshape(count, length).astype(bool)] = np.nan
    return np.asarray(values)


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10**6), size=st.floats(1e-4, 500.0), gaps=st.floats(0.0, 1.0))
def test_numbers_come_out_within_half_a_step_and_gaps_stay_gaps(
    seed: int, size: float, gaps: float
) -> None:
    rng = np.random.default_rng(seed)
    values = size * np.cumsum(rng.normal(size=(rng.integers(1, 5), rng.integers(1, 60))), axis=1)
    values[rng.uniform(size=values.shape) < gaps] = np.nan
    package = Package()
    package.add("before", rng.normal(size=(2, 7)), step=0.1)
    package.add("values", values, step=5e-5)
    found = unpacked(package, "values")
    np.testing.assert_array_equal(np.isnan(found), np.isnan(values))
    np.testing.assert_allclose(found, values, atol=0.5 * 5e-5 * (1 + 1e-6) + 1e-12 * size)


def test_the_same_numbers_give_the_same_text() -> None:
    texts = set()
    for _ in range(2):
        package = Package()
        package.add("a", np.arange(12.0).reshape(3, 4), step=0.1)
        texts.add(package.base64())
    assert len(texts) == 1


def test_a_lighter_bone_keeps_its_place_and_shape() -> None:
    bone = skin([Ball(np.zeros(3), np.array([0.03, 0.05, 0.02]))], blend=0.005)
    points, faces = lighter(bone, 0.4)
    assert len(faces) < 0.5 * len(bone.faces) < MOST_FACES
    np.testing.assert_allclose(points.max(axis=0), bone.points.max(axis=0), atol=0.002)
    np.testing.assert_allclose(points.min(axis=0), bone.points.min(axis=0), atol=0.002)


def test_stretches_close_together_are_one() -> None:
    chosen = np.array([0, 1, 1, 0, 1, 0, 0, 0, 1], dtype=bool)
    assert list(stretches(chosen, 1)) == [(1, 4), (8, 8)]
    assert list(stretches(chosen, 0)) == [(1, 2), (4, 4), (8, 8)]
    assert list(stretches(np.zeros(3, dtype=bool), 1)) == []


def test_an_exchange_is_found_in_its_very_frames(leg: FittedMotion) -> None:
    motion = exchange(longer(leg, 3), "shin", "ankle", slice(40, 55))
    found = exchanged(motion)
    assert [(e.markers, e.first, e.last) for e in found] == [(("shin", "ankle"), 40, 54)]


def test_nothing_is_called_exchanged_where_nothing_is(leg: FittedMotion) -> None:
    assert exchanged(longer(leg, 3)) == []


def test_a_marker_knocked_off_for_a_while_is_far_off_but_not_exchanged(leg: FittedMotion) -> None:
    motion = longer(leg, 3)
    motion.measured[60:70, 1] += [0.0, 0.0, 0.09]
    assert exchanged(motion) == []
    far = [e for e in far_off(motion) if e.markers == ("knee",)]
    assert [(e.first, e.last) for e in far] == [(60, 69)]
    assert far[0].largest == pytest.approx(motion.error[far[0].worst, 1])


def test_gaps_are_never_an_episode(leg: FittedMotion, change: Callable[..., Any]) -> None:
    motion = change(longer(leg, 2))
    motion.measured[10:20, 0] = np.nan
    assert all(not 10 <= e.first <= 19 for e in far_off(motion) if e.markers == ("front",))
    assert bridge_rows(motion) == 2


def test_findings_name_markers_times_and_frames_of_an_exchange(
    leg: FittedMotion, tmp_path: Path
) -> None:
    motion = exchange(longer(leg, 3), "shin", "ankle", slice(40, 55))
    findings = page_findings(read_shown_trial(write_trial(tmp_path / "swap", motion)))
    assert findings[0].level == "look"
    assert findings[0].what == (
        "shin and ankle look exchanged from 2.00 s to 2.70 s (frames 41 to 55): each lies where the other "
        "should be."
    )
    place = findings[0].places[0]
    assert (place.first, place.last, place.markers) == (40, 54, ("shin", "ankle"))


def test_a_warning_keeps_its_words_and_gets_its_place(leg: FittedMotion, tmp_path: Path) -> None:
    warning = {
        "what": "2 frames did not converge, the first is frame 8",
        "do": "look",
        "needs_a_look": True,
    }
    folder = write_trial(tmp_path / "calm", longer(leg, 1), warnings=(warning,))
    look = next(f for f in page_findings(read_shown_trial(folder)) if f.level == "look")
    assert look.what.startswith("2 frames did not converge")
    assert look.places[0].first == 7


def test_a_calm_trial_says_so_first(
    leg: FittedMotion, change: Callable[..., Any], tmp_path: Path
) -> None:
    calm = change(leg, measured=leg.fitted + 0.001)
    findings = page_findings(read_shown_trial(write_trial(tmp_path / "calm", calm)))
    assert findings[0].level == "good"
    assert "no marker is far off" in findings[0].what


def test_a_marker_that_stands_out_is_not_called_calm(
    leg: FittedMotion, change: Callable[..., Any], tmp_path: Path
) -> None:
    motion = change(leg, measured=leg.fitted + 0.001)
    motion.measured[5:9, 0] += [0.0, 0.03, 0.0]
    findings = page_findings(read_shown_trial(write_trial(tmp_path / "calm", motion)))
    assert "no marker is far off" not in findings[0].what
    assert any(f.what.startswith("front stands out from 0.25 s to 0.40 s") for f in findings)


def test_markers_left_out_are_named_with_the_reason(leg: FittedMotion, tmp_path: Path) -> None:
    why = np.full(leg.used.shape, "", dtype="<U12")
    why[3:6, 2] = "slid"
    findings = page_findings(read_shown_trial(write_trial(tmp_path / "t", leg, why_not=why)))
    said = next(f for f in findings if "left out" in f.what)
    assert said.what.startswith("3 marker-frames were left out")
    assert "shin" in said.what
    assert (said.places[0].first, said.places[0].last) == (3, 5)


def test_columns_are_grouped_by_joint_and_paired_by_side(leg: FittedMotion, tmp_path: Path) -> None:
    trial = read_shown_trial(
        write_trial(tmp_path / "t", leg), ranges={"hip_flexion_right": (-30.0, 120.0)}
    )
    assert list(trial.groups()) == ["hip", "pelvis", "toes"]
    assert [(r.name, other.name) for r, other in trial.pairs()] == [
        ("hip_flexion_right", "hip_flexion_left")
    ]
    hip = trial.columns[0]
    assert (hip.lower, hip.upper, hip.at_limit.sum()) == (-30.0, 120.0, 3)
    unseen = next(c for c in trial.columns if c.name == UNSEEN)
    assert np.isnan(unseen.band()[0]).all()
