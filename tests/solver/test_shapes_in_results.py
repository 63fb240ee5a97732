"""A model's meshes travel with the results, so that a picture needs the folder and the mesh only."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import trimesh

from condyle.model import load_skeleton
from condyle.model.meshes import GrownShape
from condyle.model.skeleton import Shape
from condyle.recording.recording import Recording
from condyle.solver.result_files import load_motion, save_trial
from condyle.solver.trial_fit import fit_trial

MODEL = """\
condyle: 1
name: plank
segments:
  plank: {shapes: [{mesh: plank.stl, at: [0, 0.1, 0], turned: {axis: z, angle: 30}, scale: 0.5}]}
joints:
  root:
    from: laboratory
    to: plank
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
markers:
  a: {segment: plank, at: [0, 0, 0]}
  b: {segment: plank, at: [0, 0.3, 0]}
  c: {segment: plank, at: [0.1, 0, 0.1]}
"""


def test_shapes_come_back_from_the_results_as_they_went_in(tmp_path: Path) -> None:
    trimesh.creation.box((0.1, 0.6, 0.1)).export(tmp_path / "plank.stl")
    (tmp_path / "plank.yaml").write_text(MODEL)
    skeleton = load_skeleton(tmp_path / "plank.yaml")
    places = np.array([marker.at for marker in skeleton.markers], dtype=float)
    recording = Recording(
        name="still",
        source="still.c3d",
        rate=100.0,
        first_frame=1,
        labels=("a", "b", "c"),
        positions=np.tile(places, (4, 1, 1)),
        residuals=np.full((4, 3), np.nan),
        cameras=np.zeros((4, 3), dtype=np.int64),
    )
    fit = fit_trial(skeleton, recording, up="Y")
    save_trial(fit, skeleton, tmp_path / "still", findings=[], origin={})
    shapes = load_motion(tmp_path / "still").shapes
    assert shapes == fit.motion.shapes
    turned = skeleton.segments[0].shapes[0].turned
    wanted = Shape(str(tmp_path / "plank.stl"), (0.0, 0.1, 0.0), turned, 0.5)
    assert shapes == {"plank": (GrownShape(wanted),)}
