"""Meshes made by trimesh, read back, placed on segments that grew."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import textwrap
from pathlib import Path

import numpy as np
import pytest
import trimesh
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.meshes import (
    MOST_DRAWN,
    GrownShape,
    MeshError,
    grown_shapes,
    load_mesh,
    mesh_remarks,
    place_mesh,
)
from condyle.model.skeleton import Shape, Turn

BOX = (0.1, 0.4, 0.06)
ENDINGS = ["stl", "ply", "obj", "glb"]


def write(tmp_path: Path, mesh: trimesh.Trimesh, name: str) -> Path:
    path = tmp_path / name
    mesh.export(path)
    return path


@pytest.mark.parametrize("ending", ENDINGS)
def test_a_box_is_the_same_box_in_every_format(tmp_path: Path, ending: str) -> None:
    mesh = load_mesh(write(tmp_path, trimesh.creation.box(BOX), f"box.{ending}"))
    assert mesh.watertight
    assert (len(mesh.faces), mesh.faces_in_file) == (12, 12)
    again = trimesh.Trimesh(mesh.points, mesh.faces)
    assert again.volume == pytest.approx(np.prod(BOX), rel=1e-6)  # positive: the outside is outside
    np.testing.assert_allclose(np.ptp(mesh.points, axis=0), BOX, rtol=1e-6)


def test_a_scene_of_several_parts_keeps_their_places(tmp_path: Path) -> None:
    scene = trimesh.Scene()
    part = trimesh.creation.icosphere(subdivisions=2, radius=0.05)
    for x in (0.0, 1.0):
        scene.add_geometry(part, transform=trimesh.transformations.translation_matrix([x, 0, 0]))
    scene.export(tmp_path / "two.glb")
    mesh = load_mesh(tmp_path / "two.glb")
    assert np.ptp(mesh.points, axis=0) == pytest.approx([1.1, 0.1, 0.1], rel=1e-3)
    assert mesh.faces_in_file == 2 * len(part.faces)


def test_many_faces_are_thinned_without_moving_the_surface(tmp_path: Path) -> None:
    sphere = trimesh.creation.icosphere(subdivisions=6, radius=0.1)
    mesh = load_mesh(write(tmp_path, sphere, "fine.ply"))
    assert mesh.faces_in_file == len(sphere.faces) > MOST_DRAWN
    assert 0.9 * MOST_DRAWN < len(mesh.faces) <= MOST_DRAWN
    np.testing.assert_allclose(np.linalg.norm(mesh.points, axis=1), 0.1, atol=3e-4)  # m: unseen


def test_a_file_is_read_once_until_it_changes(tmp_path: Path) -> None:
    path = write(tmp_path, trimesh.creation.box(BOX), "box.stl")
    first = load_mesh(path)
    assert load_mesh(path) is first
    write(tmp_path, trimesh.creation.icosphere(subdivisions=1), "box.stl")
    os.utime(path, ns=(1, 1))
    assert len(load_mesh(path).faces) == 80


def test_a_shape_is_reflected_scaled_turned_moved_then_stretched(tmp_path: Path) -> None:
    cone = trimesh.creation.cone(radius=0.1, height=0.3)
    cone.apply_translation([0.02, 0.01, 0.05])
    mesh = load_mesh(write(tmp_path, cone, "cone.ply"))
    axis = np.array([1.0, 2.0, 2.0]) / 3
    turn = Turn((axis[0], axis[1], axis[2]), 0.7)
    shape = Shape("cone.ply", (0.1, -0.2, 0.3), turn, 0.5, reflected=True)
    points, faces = place_mesh(mesh, GrownShape(shape, (1.1, 0.9, 1.2)))
    mirrored = mesh.points * [1, 1, -1]
    turned = Rotation.from_rotvec(0.7 * axis).apply(0.5 * mirrored)
    np.testing.assert_allclose(
        points, (turned + np.array([0.1, -0.2, 0.3])) * [1.1, 0.9, 1.2], atol=1e-12
    )
    grown = trimesh.Trimesh(points, faces, process=False)
    assert grown.volume == pytest.approx(cone.volume * 0.5**3 * 1.1 * 0.9 * 1.2, rel=1e-4)


def model_with(tmp_path: Path, shapes: str) -> Path:
    path = tmp_path / "leg.yaml"
    path.write_text(
        "condyle: 1\nname: leg\nmirror: {_right: _left}\n"
        f"segments: {{pelvis: {{}}, thigh_right: {{shapes: {shapes}}}}}\n"
        "joints:\n"
        "  root: {from: laboratory, to: pelvis, fixed: true}\n"
        "  hip_right: {from: pelvis, to: thigh_right, at: [0, 0, 0.1],\n"
        "    moves: [{rotate: -z, coordinate: flexion_right}]}\n"
    )
    return path


def test_a_models_shapes_come_with_their_growth_and_their_mirror_image(tmp_path: Path) -> None:
    write(tmp_path, trimesh.creation.box(BOX), "box.glb")
    shapes = grown_shapes(
        load_skeleton(model_with(tmp_path, "[{mesh: box.glb, at: [0, -0.2, 0]}]"))
    )
    assert sorted(shapes) == ["thigh_left", "thigh_right"]
    left, right = shapes["thigh_left"][0], shapes["thigh_right"][0]
    assert (left.shape.reflected, right.shape.reflected) == (True, False)
    assert left.shape.mesh == right.shape.mesh == str(tmp_path / "box.glb")
    assert mesh_remarks(shapes) == ()


def test_sizes_open_surfaces_and_thinning_are_said(tmp_path: Path) -> None:
    femur = trimesh.creation.cylinder(radius=15, height=430)
    write(tmp_path, femur, "femur.stl")
    open_box = trimesh.creation.box(BOX)
    open_box.update_faces(np.arange(12) > 1)
    write(tmp_path, open_box, "open.stl")
    write(tmp_path, trimesh.creation.icosphere(subdivisions=6, radius=0.0005), "dot.stl")

    def said(mesh: str, scale: float = 1.0) -> str:
        shape = Shape(str(tmp_path / mesh), scale=scale)
        return " ".join(mesh_remarks({"thigh": (GrownShape(shape),)}))

    assert said("femur.stl") == (
        "thigh: the mesh femur.stl is 430 m long as placed; where it is in millimetres, write "
        "`scale: 0.001`."
    )
    assert said("femur.stl", 0.001) == ""
    assert said("open.stl") == "thigh: the mesh open.stl is not closed; it is drawn all the same."
    assert "is only 1 mm long as placed" in said("dot.stl")
    assert "has 81920 faces; 20000 of them are drawn" in said("dot.stl")


GLB_CLAIM = {"asset": {"version": "2.0"}, "accessors": [{"count": 10**9, "type": "VEC3"}]}


@pytest.mark.parametrize(
    ("name", "content", "words"),
    [
        ("a.stl", b"solid", "holds no triangle"),
        ("a.stl", b"\0" * 100, "holds no triangle"),
        ("a.stl", b"", "damaged"),
        ("a.obj", b"v 0 0 0\nv 1 0 0\nv 0 1 0\nf 1 2 9\n", "damaged"),
        ("a.obj", b"v 0 0 0\nv 1 0 0\nv nan 1 0\nf 1 2 3\n", "holds no triangle"),
        ("a.glb", b"glTF\2\0\0\0", "damaged"),
        (
            "a.ply",
            b"ply\nformat ascii 1.0\nelement vertex 1000000000\nproperty float x\nend_header\n",
            "claims 1000000000 items in 75 bytes",
        ),
        (
            "a.glb",
            b"glTF\2\0\0\0\0\0\0\0" + len(json.dumps(GLB_CLAIM)).to_bytes(4, "little") + b"JSON"
            + json.dumps(GLB_CLAIM).encode(),
            "claims 1000000000 items",
        ),
    ],
)  # fmt: skip
def test_damaged_meshes_are_refused_with_their_path(
    tmp_path: Path, name: str, content: bytes, words: str
) -> None:
    (tmp_path / name).write_bytes(content)
    with pytest.raises(MeshError) as caught:
        load_mesh(tmp_path / name)
    assert str(caught.value).startswith(f"{tmp_path / name}: this mesh ")
    assert words in str(caught.value)


def test_a_mesh_that_is_not_there_is_refused(tmp_path: Path) -> None:
    with pytest.raises(MeshError, match="cannot be read"):
        load_mesh(tmp_path / "gone.stl")
    with pytest.raises(MeshError, match="cannot be read"):
        load_mesh(tmp_path)


def test_a_mesh_cannot_name_another_file_to_be_read(tmp_path: Path) -> None:
    secret = tmp_path / "secret.bin"
    secret.write_bytes(trimesh.creation.box(BOX).export(file_type="stl"))
    box = {"count": 3, "type": "VEC3", "componentType": 5126, "bufferView": 0}
    tree = {
        "asset": {"version": "2.0"},
        "buffers": [{"byteLength": 36, "uri": "secret.bin"}],
        "bufferViews": [{"buffer": 0, "byteLength": 36}],
        "accessors": [box],
        "meshes": [{"primitives": [{"attributes": {"POSITION": 0}}]}],
        "nodes": [{"mesh": 0}],
        "scenes": [{"nodes": [0]}],
    }
    text = json.dumps(tree).encode()
    text += b" " * (-len(text) % 4)
    head = b"glTF" + (2).to_bytes(4, "little") + (20 + len(text)).to_bytes(4, "little")
    (tmp_path / "a.glb").write_bytes(head + len(text).to_bytes(4, "little") + b"JSON" + text)
    with pytest.raises(MeshError, match="damaged"):
        load_mesh(tmp_path / "a.glb")


FUZZ = """
import sys
from pathlib import Path
import numpy as np
from condyle.model.meshes import MeshError, load_mesh

folder = Path(sys.argv[1])
refused = 0
for seed in range(int(sys.argv[2])):
    rng = np.random.default_rng(seed)
    ending = ["stl", "ply", "obj", "glb"][seed % 4]
    data = bytearray((folder / f"whole.{ending}").read_bytes())
    for _ in range(rng.integers(1, 6)):
        data[rng.integers(min(len(data), 2000) if rng.random() < 0.6 else len(data))] = (
            rng.choice([0, 1, 45, 57, 127, 128, 255, rng.integers(256)])
        )
    if rng.random() < 0.15:
        data = data[: rng.integers(len(data))]
    path = folder / f"mutant{seed}.{ending}"
    path.write_bytes(data)
    try:
        load_mesh(path)
    except MeshError:
        refused += 1
print(refused)
"""


def test_mutated_meshes_are_read_or_refused_and_nothing_else(tmp_path: Path) -> None:
    for ending in ENDINGS:
        write(tmp_path, trimesh.creation.icosphere(subdivisions=2), f"whole.{ending}")
    done = subprocess.run(
        [sys.executable, "-c", textwrap.dedent(FUZZ), str(tmp_path), "200"],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 0, f"exit {done.returncode}: {done.stderr[-500:]}"
    assert 0 < int(done.stdout) < 200
