"""What the tests of the reader share: one small sound model, and how to read a changed one."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from condyle.model import load_skeleton
from condyle.model.errors import ModelError
from condyle.model.skeleton import Skeleton

LEG = """\
condyle: 1
name: leg
person: {stature: 1.75, mass: 70}
segments:
  pelvis:
    mass_share: 0.1
    gyration: [0.1, 0.1, 0.1]
    landmarks: {ASIS: [0.05, 0.09, 0.12]}
  thigh: {mass: 9.8, centre_of_mass: [0, -0.18, 0]}
  shank: {}
joints:
  root:
    from: laboratory
    to: pelvis
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  hip:
    from: pelvis
    to: thigh
    at: [0, 0, 0.09]
    moves:
      - {rotate: z, coordinate: hip_flexion, range: [-30, 120], rest: 5}
  knee:
    from: thigh
    to: shank
    at: [0, -0.42, 0]
    moves:
      - {rotate: -z, coordinate: knee_flexion, range: [-5, 150]}
      - {translate: x, follows: knee_flexion, spline: [[0, 0], [30, 0.004], [60, 0.001]]}
      - {rotate: y, coordinate: knee_axial, follows: knee_flexion, polynomial: [0, 0.18]}
coordinates:
  hip_flexion: {rest_sd: 60}
markers:
  ASIS: {segment: pelvis, at: ASIS}
  thigh_a: {segment: thigh, at: [0.06, -0.2, 0.07]}
  cluster: {segment: shank}
"""

TIED = """\
condyle: 1
segments:
  thorax: {landmarks: {IJ: [0, 0, 0]}}
  scapula: {landmarks: {AI: [-0.02, -0.12, 0]}}
  pelvis: {landmarks: {ASIS_right: [0, 0, 0.1], ASIS_left: [0, 0, -0.1], PSIS_right: [-0.1, 0, 0.1]}}
  thigh: {}
  bar: {}
joints:
  root:
    from: laboratory
    to: thorax
    floating: {position: [x, y, z], angles: {sequence: [y, x, z], names: [a, b, c]}}
  scapula:
    from: thorax
    to: scapula
    spherical: {angles: {sequence: [y, x, z], names: [d, e, f]}, cone: 60, twist: [-40, 40]}
  back: {from: thorax, to: pelvis, fixed: true}
  hip: {from: pelvis, to: thigh, at: [0, 0, 0.09], moves: [{rotate: z, coordinate: hip_flexion}]}
  bar: {from: laboratory, to: bar, fixed: true}
ties:
  grip: {point: [scapula, AI], meets: [bar, [0, 0, 0.25]]}
  seat: {point: [thorax, IJ], on_plane: {of: laboratory, through: [0, 0, 0], normal: y}}
  glide: {point: [scapula, AI], on_ellipsoid: {of: thorax, centre: IJ, radii: [0.1, 0.2, 0.1]}}
  rod: {point: [bar, [0, 0, 0]], stays: {distance: 0.3, from: [thorax, IJ]}}
sizing:
  joints:
    hip: {place_sd: 0.012, axis_sd: 4}
markers:
  M: {segment: thigh, at: [0, 0, 0], placed: [0, 0, 0], placed_sd: [0, 0, 0]}
"""


@pytest.fixture
def tied() -> str:
    """A sound model with every kind of tie, limits of a spherical joint, and a freed joint."""
    return TIED


@pytest.fixture
def leg() -> str:
    """A sound model of three segments."""
    return LEG


@pytest.fixture
def read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[..., Skeleton]:
    """Read a model from its text, beside other files where there are some."""
    monkeypatch.chdir(tmp_path)

    def read_text(text: str | bytes, **others: str) -> Skeleton:
        for name, other in others.items():
            Path(f"{name}.yaml").write_text(other)
        content = text if isinstance(text, bytes) else text.encode()
        Path("leg.yaml").write_bytes(content)
        return load_skeleton("leg.yaml")

    return read_text


@pytest.fixture
def report(read: Callable[..., Skeleton]) -> Callable[..., str]:
    """What a person is told about a model's text; nothing where it is sound."""

    def report_of(text: str | bytes, **others: str) -> str:
        try:
            read(text, **others)
        except ModelError as error:
            return str(error)
        return ""

    return report_of
