"""Two general-purpose robotics engines read our URDF and agree with our own kinematics and masses."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import casadi as ca
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.elementary import coupled
from condyle.model.growth import sized_numbers
from condyle.model.inertia import centre_of_mass, sized_inertias, total_mass
from condyle.model.kinematics import Kinematics
from condyle.model.robot import RobotDescription, RobotJoint, joint_numbers
from condyle.model.robot_chains import robot_description
from condyle.model.skeleton import Floating, Moves, Person, Size, Skeleton, Spherical, Vector
from condyle.model.urdf import roll_pitch_yaw, urdf_text
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.joint_angles import report_angles
from condyle.solver.posture import Posture, quaternions_of, rotations
from condyle.solver.upright import Upright

LOUD = "needs two robotics engines: pip install pin mujoco"
pin: Any = pytest.importorskip("pinocchio", reason=LOUD)
mujoco: Any = pytest.importorskip("mujoco", reason=LOUD)

FloatArray = NDArray[np.float64]

CONFIGURATIONS = 200
SAME = 1e-9
"""m, rad, and share: the rounding of a double, grown along a chain of twenty links, is far below."""

SINGULAR = np.radians(5)
"""As the language has it. Nearer to it the three turns of a ball race, and with them the least
inertia that one engine insists on for links without any: then that engine's own matrix is wrong."""

# Every kind of joint, every segment with a mass, and only straight lines between coordinates.
REACHER = """\
condyle: 1
name: "reacher <1> & 'twin' — é"
person: {stature: 1.7, mass: 70}
mirror: {_right: _left}
segments:
  trunk: {mass_share: 0.4, centre_of_mass: [0.01, 0.2, 0.003], gyration: [0.2, 0.1, 0.18]}
  pan: {mass: 1.5, centre_of_mass: [0, 0.02, 0.01], gyration: [0.1, 0.12, 0.09]}
  arm_right: {mass_share: 0.03, centre_of_mass: [0, -0.15, 0.01], gyration: [0.08, 0.03, 0.08]}
  forearm_right: {mass_share: 0.02, centre_of_mass: [0.01, -0.1, 0], gyration: [0.07, 0.02, 0.07]}
  hand_right: {mass: 0.4, centre_of_mass: [0, -0.08, 0], gyration: [0.05, 0.03, 0.05]}
  ring_right: {mass: 0.01, centre_of_mass: [0, 0, 0.01], gyration: [0.01, 0.01, 0.01]}
  slider_right: {mass: 0.2, centre_of_mass: [0.01, 0, 0.01], gyration: [0.05, 0.05, 0.05]}
  world: {mass: 0.3, centre_of_mass: [0, 0.1, 0], gyration: [0.05, 0.05, 0.05]}
joints:
  world:
    from: laboratory
    to: trunk
    at: [0.1, -0.2, 0.3]
    in_child: [0.02, 0.05, -0.03]
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  thrown:
    from: laboratory
    to: pan
    floating: {position: [sx, sy, sz], angles: {sequence: [z, x, y], names: [s1, s2, s3]}}
  shoulder_right:
    from: trunk
    to: arm_right
    at: [0.03, 0.4, 0.2]
    in_child: [0.01, 0.02, -0.01]
    turned: {axis: [1, 2, -1], angle: 35}
    spherical: {angles: {sequence: [y, -x, y], names: [plane_right, elevation_right, axial_right]}}
  elbow_right:
    from: arm_right
    to: forearm_right
    at: [0.02, -0.3, 0.01]
    turned: {axis: y, angle: 90}
    moves:
      - {rotate: [0.3, -0.2, 1], coordinate: bend_right, range: [-10, 140], rest: 20}
      - {translate: [1, 0.5, 0], follows: bend_right, polynomial: [0.01, 0.0002], between: [0, 90]}
      - {rotate: y, coordinate: twist_right, follows: bend_right, spline: [[0, 2], [60, 32], [90, 47]]}
      - {rotate: x, coordinate: hidden_right}
      - {translate: [0, 1, 0.2], coordinate: slide_right, range: [-0.05, 0.08]}
      - {rotate: z, follows: hidden_right, polynomial: [3, 0.5]}
  wrist_right:
    from: forearm_right
    to: hand_right
    at: [0, -0.25, 0]
    in_child: [0, 0.03, 0.01]
    moves:
      - {rotate: x, coordinate: screw_right, follows: twist_right, polynomial: [0, 0.5]}
      - {rotate: [0.1, 0.2, -1], coordinate: shared_right}
      - {rotate: y, follows: screw_right, polynomial: [4]}
  ring_right: {from: hand_right, to: ring_right, at: [0, -0.1, 0], turned: {axis: y, angle: 90}, fixed: true}
  drawer_right:
    from: trunk
    to: slider_right
    at: [0, 0.1, 0.15]
    moves: [{translate: x, coordinate: drawer_right}, {rotate: z, coordinate: shared_right}]
  neck:
    from: trunk
    to: world
    at: [0, 0.5, 0]
    spherical: {angles: {sequence: [z, x, y], names: [nod, lean, gaze]}}
coordinates:
  hidden_right: {held: 25}
"""
FREE_KNEE = """\
condyle: 1
extends: lower_limbs
joints: {knee_right: {moves: [
  {rotate: -z, coordinate: knee_flexion_right, range: [-20, 165]},
  {rotate: x, coordinate: knee_adduction_right, range: [-20, 20]}]}}
"""
PLANAR = """\
condyle: 1
name: planar
segments:
  cart: {mass: 2, centre_of_mass: [0, 0.1, 0], gyration: [0.1, 0.1, 0.1]}
  pole: {mass: 1, centre_of_mass: [0, 0.5, 0], gyration: [0.3, 0.01, 0.3]}
joints:
  rail: {from: laboratory, to: cart, at: [0.1, 0.2, 0.3], turned: upright, moves: [{translate: x, coordinate: way}]}
  pivot: {from: cart, to: pole, moves: [{rotate: z, coordinate: fall}]}
"""


@dataclass(frozen=True)
class Case:
    """A sized skeleton in many configurations, and what our own code says of them."""

    skeleton: Skeleton
    functions: SkeletonFunctions
    description: RobotDescription
    urdf: str
    posture: Posture
    numbers: FloatArray
    poses: FloatArray
    angle_rates: Mapping[str, tuple[int, FloatArray]]
    values: Mapping[str, FloatArray]
    regular: NDArray[np.bool_]

    def pose_of(self, link: str, frame: int) -> FloatArray:
        segment = next(s for s, name in self.description.link_of_segment.items() if name == link)
        pose: FloatArray = self.poses[frame, self.skeleton.segment_index(segment)]
        return pose

    def root_pose(self, joint: str, frame: int) -> FloatArray:
        segment = self.description.segment_of_floating[joint]
        pose: FloatArray = self.poses[frame, self.skeleton.segment_index(segment)]
        return pose


def sized(skeleton: Skeleton, rng: np.random.Generator) -> Skeleton:
    """One person: other factors on each axis of each segment, another mass, freed joints."""

    def drawn(low: float, high: float) -> Vector:
        x, y, z = rng.uniform(low, high, 3)
        return (float(x), float(y), float(z))

    joints = []
    for joint in skeleton.joints:
        if isinstance(joint.motion, Moves):
            joint = replace(joint, axis_turn=drawn(-0.1, 0.1), placed=drawn(-0.4, 0.4))
        joints.append(joint)
    sizes = {name: Size(drawn(0.8, 1.25)) for name in skeleton.segment_names}
    return replace(skeleton, joints=tuple(joints), sizes=sizes, subject=Person(1.6, 55.5))


def with_masses(skeleton: Skeleton) -> Skeleton:
    """The same skeleton, each segment a body of its own."""
    rng = np.random.default_rng(21)
    segments = []
    for segment in skeleton.segments:
        x, y, z = rng.uniform(-0.1, 0.1, 3)
        radii = (0.05, 0.04, 0.06)
        body = replace(segment, mass=1.5, centre_of_mass=(float(x), float(y), float(z)))
        segments.append(replace(body, gyration=radii))
    return replace(skeleton, segments=tuple(segments))


def case_of(
    skeleton: Skeleton, random_posture: Callable[..., Posture], *, freed: bool = False
) -> Case:
    rng = np.random.default_rng(20)
    person = sized(skeleton, rng)
    if not freed:
        person = replace(person, joints=skeleton.joints)
    upright = Upright("+Z", "told").laboratory_from_upright
    functions = SkeletonFunctions(person)
    posture: Posture = random_posture(functions, CONFIGURATIONS, rng)
    free = [c for c in person.coordinates if c.follows is None]
    for k, coordinate in enumerate(free):
        if coordinate.held is not None:
            posture.scalars[:, k] = coordinate.held
    drivers = {c.name: posture.scalars[:, k] for k, c in enumerate(free)}
    angle_rates = {}
    regular = np.ones(CONFIGURATIONS, dtype=bool)
    by_name = {joint.name: joint.motion for joint in person.joints}
    for ball, name in enumerate(functions.kinematics.freedoms.balls):
        motion = by_name[name]
        assert isinstance(motion, Floating | Spherical)
        stack = rotations(posture.quaternions[:, ball]).as_matrix()
        told = report_angles(stack, motion.angles)
        for i, angle in enumerate(motion.angles.names):
            drivers[angle] = told.values[:, i]
            angle_rates[angle] = (ball, told.rates[:, i])
        if isinstance(motion, Spherical):
            alike = motion.angles.axes[0] == motion.angles.axes[2]
            away = np.sin(told.values[:, 1]) if alike else np.cos(told.values[:, 1])
            regular &= np.abs(away) > np.sin(SINGULAR)
    description = robot_description(person, upright)
    numbers = sized_numbers(person, upright)
    return Case(
        skeleton=person,
        functions=functions,
        description=description,
        urdf=urdf_text(person, description),
        posture=posture,
        numbers=numbers,
        poses=functions.poses(posture, numbers),
        angle_rates=angle_rates,
        values=joint_numbers(description, drivers),
        regular=regular,
    )


@pytest.fixture(
    scope="module",
    params=["reacher", "freed reacher", "free_knee", "planar", "tree", "lower_limbs", "full_body"],
)
def case(
    request: pytest.FixtureRequest,
    skeleton_of: Callable[[str], Skeleton],
    tree: Skeleton,
    random_posture: Callable[..., Posture],
) -> Case:
    """Models of straight lines only, then those whose curves become joints of their own."""
    texts = {"reacher": REACHER, "free_knee": FREE_KNEE, "planar": PLANAR}
    name = request.param
    if name == "tree":
        return case_of(with_masses(tree), random_posture, freed=True)
    if name == "freed reacher":
        return case_of(skeleton_of(REACHER), random_posture, freed=True)
    skeleton = skeleton_of(texts[name]) if name in texts else load_skeleton(name)
    return case_of(skeleton, random_posture)


class Pinocchio:
    """One engine, given numbers by the URDF's own joint names."""

    def __init__(self, urdf: str) -> None:
        self.model = pin.buildModelFromXML(urdf)
        self.data = self.model.createData()

    def place(self, case: Case, frame: int) -> None:
        q = np.zeros(self.model.nq)
        for i in range(1, self.model.njoints):
            joint, name = self.model.joints[i], self.model.names[i]
            if joint.nq == 7:
                pose = case.root_pose(name, frame)
                w, x, y, z = quaternions_of(Rotation.from_matrix(pose[None, :3, :3]))[0]
                numbers = [*pose[:3, 3], x, y, z, w]
            elif joint.nq == 2:
                angle = case.values[name][frame]
                numbers = [np.cos(angle), np.sin(angle)]
            else:
                numbers = [case.values[name][frame]]
            q[joint.idx_q : joint.idx_q + joint.nq] = numbers
        pin.framesForwardKinematics(self.model, self.data, q)
        upper = np.triu(pin.crba(self.model, self.data, q))
        self.mass_matrix = upper + np.triu(upper, 1).T
        self.centre = np.array(pin.centerOfMass(self.model, self.data, q))

    @property
    def mass(self) -> float:
        return float(pin.computeTotalMass(self.model))

    def pose(self, link: str) -> FloatArray:
        frame = self.model.getFrameId(link, pin.FrameType.BODY)
        return np.array(self.data.oMf[frame].homogeneous)

    def speeds(self, name: str) -> slice:
        joint = self.model.joints[self.model.getJointId(name)]
        return slice(joint.idx_v, joint.idx_v + joint.nv)


class Mujoco:
    """The other engine; its free joints tell linear speed in world axes."""

    def __init__(self, urdf: str) -> None:
        self.model = mujoco.MjModel.from_xml_string(urdf)
        self.data = mujoco.MjData(self.model)

    def place(self, case: Case, frame: int) -> None:
        for i in range(self.model.njnt):
            joint = self.model.joint(i)
            first = int(joint.qposadr[0])
            if joint.type[0] == mujoco.mjtJoint.mjJNT_FREE:
                pose = case.root_pose(joint.name, frame)
                quaternion = quaternions_of(Rotation.from_matrix(pose[None, :3, :3]))[0]
                self.data.qpos[first : first + 7] = [*pose[:3, 3], *quaternion]
            else:
                self.data.qpos[first] = case.values[joint.name][frame]
        # Not mj_forward: it would also solve for accelerations, and log what it thinks of them.
        mujoco.mj_kinematics(self.model, self.data)
        mujoco.mj_comPos(self.model, self.data)
        mujoco.mj_crb(self.model, self.data)
        self.mass_matrix = np.zeros((self.model.nv, self.model.nv))
        mujoco.mj_fullM(self.model, self.data, self.mass_matrix)
        self.centre = np.array(self.data.subtree_com[0])

    @property
    def mass(self) -> float:
        return float(self.model.body_subtreemass[0])

    def pose(self, link: str) -> FloatArray:
        pose = np.eye(4)
        pose[:3, :3] = self.data.body(link).xmat.reshape(3, 3)
        pose[:3, 3] = self.data.body(link).xpos
        return pose

    def speeds(self, name: str) -> slice:
        joint = self.model.joint(name)
        count = 6 if joint.type[0] == mujoco.mjtJoint.mjJNT_FREE else 1
        return slice(int(joint.dofadr[0]), int(joint.dofadr[0]) + count)


ENGINES: dict[str, Callable[[str], Any]] = {"pinocchio": Pinocchio, "mujoco": Mujoco}


@pytest.fixture(autouse=True)
def _where_an_engine_may_leave_its_log(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


@pytest.fixture(params=list(ENGINES))
def engine(request: pytest.FixtureRequest, case: Case) -> Any:
    return ENGINES[request.param](case.urdf)


def test_every_segment_is_where_both_engines_put_its_link(case: Case, engine: Any) -> None:
    apart, turned = 0.0, 0.0
    for frame in range(CONFIGURATIONS):
        engine.place(case, frame)
        for link in case.description.link_of_segment.values():
            ours, theirs = case.pose_of(link, frame), engine.pose(link)
            apart = max(apart, float(np.linalg.norm(ours[:3, 3] - theirs[:3, 3])))
            # |R - S| is sqrt(2) times the angle between them, where that is small.
            difference = float(np.linalg.norm(ours[:3, :3] - theirs[:3, :3])) / np.sqrt(2)
            turned = max(turned, difference)
    print(f"{case.skeleton.name}: {apart:.1e} m, {turned:.1e} rad")
    assert apart < SAME
    assert turned < SAME


def test_total_mass_and_its_centre_agree(case: Case, engine: Any) -> None:
    inertias = sized_inertias(case.skeleton)
    assert engine.mass == pytest.approx(total_mass(inertias), rel=SAME)
    centres = centre_of_mass(inertias, case.skeleton.segment_names, case.poses)
    for frame in range(CONFIGURATIONS):
        engine.place(case, frame)
        error = np.linalg.norm(engine.centre - centres[frame])
        assert error < SAME * np.linalg.norm(centres[frame])


def rates_of_poses(case: Case) -> ca.Function:
    """Freedoms to the derivatives of every segment's rotation (9) and origin (3) for a step."""
    kinematics = Kinematics(case.skeleton)
    inputs = [kinematics.scalars, kinematics.quaternions, kinematics.numbers]
    told = [
        ca.vertcat(ca.vec(rotation.T), origin)
        for rotation, origin in zip(kinematics.rotations, kinematics.origins, strict=True)
    ]
    poses = ca.Function("poses", inputs, [ca.vertcat(*told)])
    freedoms = kinematics.freedoms
    step = ca.SX.sym("step", freedoms.size)
    turned = []
    for ball in range(len(freedoms.balls)):
        q = kinematics.quaternions[4 * ball : 4 * ball + 4]
        v = step[freedoms.ball_slice(ball)] / 2
        product = ca.vertcat(-ca.dot(q[1:], v), q[0] * v + ca.cross(q[1:], v))
        turned.append(q + product)
    stepped = poses(
        kinematics.scalars + step[: len(freedoms.scalars)],
        ca.vertcat(ca.SX(0, 1), *turned),
        kinematics.numbers,
    )
    jacobian = ca.substitute(ca.jacobian(stepped, step), step, ca.DM.zeros(freedoms.size))
    return ca.Function("rates", inputs, [ca.densify(jacobian)])


def own_mass_matrix(case: Case, frame: int, rates: FloatArray) -> FloatArray:
    """Kinetic energy's matrix for our freedoms: sum of m Jc'Jc + Jw'IJw (rates: segments, 12, n)."""
    M = np.zeros((rates.shape[2], rates.shape[2]))
    inertias = sized_inertias(case.skeleton)
    for i, name in enumerate(case.skeleton.segment_names):
        if name not in inertias:
            continue
        inertia, rotation = inertias[name], case.poses[frame, i, :3, :3]
        dR = rates[i, :9].reshape(3, 3, -1)
        centre = np.einsum("ijk,j->ik", dR, np.array(inertia.centre)) + rates[i, 9:]
        W = np.einsum("ji,jkn->ikn", rotation, dR)
        turning = np.array([W[2, 1], W[0, 2], W[1, 0]])
        M += inertia.mass * centre.T @ centre
        M += turning.T @ np.diag(inertia.moments) @ turning
    return M


def rates_of_joint(case: Case, joint: RobotJoint, frame: int) -> FloatArray:
    """Derivative of a URDF joint's number for a step of our freedoms."""
    freedoms = case.functions.kinematics.freedoms
    row = np.zeros(freedoms.size)
    assert joint.value is not None
    driver = joint.value.driver
    if driver in case.angle_rates:
        ball, rates = case.angle_rates[driver]
        row[freedoms.ball_slice(ball)] = rates[frame]
        return row
    k = freedoms.scalars.index(driver)
    x = ca.SX.sym("x")
    value = x
    for function in joint.value.functions:
        value = coupled(function, value)
    slope = ca.Function("slope", [x], [ca.jacobian(value, x)])
    row[k] = joint.value.gain * float(slope(case.posture.scalars[frame, k]))
    return row


def speeds_from_freedoms(case: Case, engine: Any, frame: int, rates: FloatArray) -> FloatArray:
    """(engine's speeds, our freedoms)"""
    G = np.zeros((len(engine.mass_matrix), rates.shape[2]))
    for joint in case.description.joints:
        if joint.kind == "fixed":
            continue
        rows = engine.speeds(joint.name)
        if joint.kind != "floating":
            G[rows] = rates_of_joint(case, joint, frame)
            continue
        i = case.skeleton.segment_index(case.description.segment_of_floating[joint.name])
        rotation = case.poses[frame, i, :3, :3]
        W = np.einsum("ji,jkn->ikn", rotation, rates[i, :9].reshape(3, 3, -1))
        linear = rates[i, 9:] if isinstance(engine, Mujoco) else rotation.T @ rates[i, 9:]
        G[rows] = np.concatenate([linear, [W[2, 1], W[0, 2], W[1, 0]]])
    return G


def test_the_joint_space_mass_matrix_agrees(case: Case, engine: Any) -> None:
    rates_function = rates_of_poses(case)
    held = [c.held is not None for c in case.skeleton.coordinates if c.follows is None]
    balls = 3 * len(case.functions.kinematics.freedoms.balls)
    moving = np.flatnonzero(~np.array([*held, *[False] * balls]))
    worst = 0.0
    everywhere = np.ones_like(case.regular)
    frames = np.flatnonzero(case.regular if isinstance(engine, Mujoco) else everywhere)
    assert len(frames) > 0.95 * CONFIGURATIONS
    for frame in frames:
        engine.place(case, frame)
        quaternions = case.posture.quaternions[frame].ravel()
        flat = rates_function(case.posture.scalars[frame], quaternions, case.numbers).full()
        rates = flat.reshape(len(case.skeleton.segments), 12, -1)
        ours = own_mass_matrix(case, frame, rates)
        G = speeds_from_freedoms(case, engine, frame, rates)
        theirs = G.T @ engine.mass_matrix @ G
        # An element's natural size: a share of the two freedoms' own inertias.
        own = np.sqrt(np.diag(ours))[moving]
        error = np.abs(theirs - ours)[np.ix_(moving, moving)]
        worst = max(worst, float((error / np.outer(own, own)).max()))
    print(f"{case.skeleton.name}: mass matrix {worst:.1e} in {len(frames)} configurations")
    assert worst < SAME


def test_the_two_engines_agree_on_the_whole_mass_matrix(case: Case) -> None:
    one, other = Pinocchio(case.urdf), Mujoco(case.urdf)
    for frame in range(CONFIGURATIONS):
        one.place(case, frame)
        other.place(case, frame)
        T = np.zeros_like(one.mass_matrix)
        for joint in case.description.joints:
            if joint.kind == "fixed":
                continue
            block = np.eye(6 if joint.kind == "floating" else 1)
            if joint.kind == "floating":
                block[:3, :3] = case.root_pose(joint.name, frame)[:3, :3]
            T[other.speeds(joint.name), one.speeds(joint.name)] = block
        theirs = T.T @ other.mass_matrix @ T
        assert np.abs(theirs - one.mass_matrix).max() < SAME * np.abs(one.mass_matrix).max()


def test_both_engines_take_followers_from_the_mimic_elements(
    skeleton_of: Callable[[str], Skeleton], random_posture: Callable[..., Posture]
) -> None:
    case = case_of(skeleton_of(REACHER), random_posture)
    mimics = {j.name: j.mimic for j in case.description.joints if j.mimic is not None}
    assert len(mimics) == 8
    for name, mimic in mimics.items():
        told = mimic.multiplier * case.values[mimic.joint] + mimic.offset
        np.testing.assert_allclose(told, case.values[name], rtol=0, atol=1e-14)
    model = mujoco.MjModel.from_xml_string(case.urdf)
    assert model.neq == len(mimics)
    for equation in range(model.neq):
        follower = model.joint(int(model.eq_obj1id[equation])).name
        driver = model.joint(int(model.eq_obj2id[equation])).name
        mimic = mimics[follower]
        assert driver == mimic.joint
        np.testing.assert_allclose(
            model.eq_data[equation, :2], [mimic.offset, mimic.multiplier], rtol=0, atol=1e-15
        )


def test_a_follower_beyond_the_joint_it_follows_has_no_freedom_of_its_own(
    skeleton_of: Callable[[str], Skeleton], random_posture: Callable[..., Posture]
) -> None:
    # Asked to heed mimic elements, this engine wants the followed joint above or before the other.
    alone = REACHER.replace("{rotate: z, coordinate: shared_right}]", "]")
    case = case_of(skeleton_of(alone), random_posture)
    mimics = [joint for joint in case.description.joints if joint.mimic is not None]
    followed, free = (pin.buildModelFromXML(case.urdf, mimic=heeded) for heeded in (True, False))
    assert free.nv - followed.nv == len(mimics) > 0


def test_a_turned_axis_keeps_the_zero_posture_and_turns_the_joint(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    """Every move M becomes T M T^-1 in the parent: computed here with plain matrices."""
    skeleton = skeleton_of(PLANAR)
    turn, place = (0.1, -0.2, 0.05), np.array([0.02, 0.3, -0.01])
    pivot = replace(skeleton.joints[1], axis_turn=turn, at=(0.02, 0.3, -0.01))
    skeleton = replace(skeleton, joints=(skeleton.joints[0], pivot))
    engine = Pinocchio(urdf_text(skeleton, robot_description(skeleton, np.eye(3))))
    T = Rotation.from_rotvec(turn)
    for angle in (0.0, 0.7):
        q = np.array([0.0, np.cos(angle), np.sin(angle)])
        pin.framesForwardKinematics(engine.model, engine.data, q)
        moved = T * Rotation.from_rotvec([0, 0, angle]) * T.inv()
        pose = np.linalg.inv(engine.pose("cart")) @ engine.pose("pole")
        np.testing.assert_allclose(pose[:3, :3], moved.as_matrix(), rtol=0, atol=1e-14)
        np.testing.assert_allclose(pose[:3, 3], place, rtol=0, atol=1e-14)


angles = st.floats(-np.pi, np.pi)


@given(
    first=angles, second=st.one_of(angles, st.sampled_from([np.pi / 2, -np.pi / 2])), third=angles
)
def test_fixed_turns_survive_as_roll_pitch_and_yaw(
    first: float, second: float, third: float
) -> None:
    rotation = Rotation.from_euler("ZYX", [first, second, third]).as_matrix()
    roll, pitch, yaw = roll_pitch_yaw(rotation)
    again = Rotation.from_euler("xyz", [roll, pitch, yaw]).as_matrix()
    np.testing.assert_allclose(again, rotation, rtol=0, atol=1e-14)
