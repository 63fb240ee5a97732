"""A skeleton as plain frozen data: what a model file says, checked, in metres, kilograms and radians.

Nothing here computes. Reading builds these, growth and kinematics turn them into numbers and
functions. A :class:`Skeleton` always holds the numbers of the *reference* person; what makes it
one particular person is ``sizes`` (growth factors) and the markers' ``placed``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from math import inf
from typing import Literal, TypeAlias

Vector = tuple[float, float, float]
"""Three numbers in the frame that the name beside it says, in metres unless an axis."""

LABORATORY = "laboratory"
"""The recording's own frame: the parent of every root joint, never a segment."""

Regression: TypeAlias = Literal["harrington_2007", "bell_1990", "hara_2016"]
"""A published regression for the hip's centre from the spines of the pelvis."""


@dataclass(frozen=True, slots=True)
class Shape:
    """A mesh to draw on a segment.

    `mesh` is its full path. Where `reflected`, its z is reversed first (the mirror does that); then
    `scale` resizes it, `turned` and `at` place it.
    """

    mesh: str
    at: Vector = (0.0, 0.0, 0.0)
    turned: Turn | None = None
    scale: float = 1.0
    reflected: bool = False


@dataclass(frozen=True, slots=True)
class Segment:
    """One rigid body, in ISB axes (X forward, Y up, Z to the subject's right).

    Attributes
    ----------
    mass : float or None
        kg, of the reference person; None where the model gives no mass.
    mass_share : float or None
        The share of body mass it was given as, where it was.
    centre_of_mass, gyration : Vector or None
        m in the segment; radii of gyration about the centre of mass for turning about x, y, z.
    landmarks : name -> Vector
        m in the segment.
    length : two Vectors or None
        The ends of what a tape would measure; None where the segment has no child to end at.
    """

    name: str
    mass: float | None = None
    mass_share: float | None = None
    centre_of_mass: Vector | None = None
    gyration: Vector | None = None
    landmarks: Mapping[str, Vector] = field(default_factory=dict)
    length: tuple[Vector, Vector] | None = None
    shapes: tuple[Shape, ...] = ()


@dataclass(frozen=True, slots=True)
class Turn:
    """A fixed rotation: unit axis and angle (rad)."""

    axis: Vector
    angle: float


@dataclass(frozen=True, slots=True)
class Polynomial:
    """Ascending coefficients, in SI and radians; linear outside `between` where that is given."""

    coefficients: tuple[float, ...]
    between: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True)
class Spline:
    """A natural cubic through (x, y) points in SI and radians; linear outside them."""

    points: tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True)
class Move:
    """One elementary move: along or about one axis of the frame reached so far (Corke 2007).

    Attributes
    ----------
    kind : "rotate" or "translate"
    axis : Vector
        Unit, in the frame reached so far.
    coordinate : str or None
        The coordinate that is this move's value; None only where the move follows without a name.
    follows : str or None
        The coordinate whose `function` gives the value; None where the coordinate is free.
    """

    kind: Literal["rotate", "translate"]
    axis: Vector
    coordinate: str | None
    follows: str | None = None
    function: Polynomial | Spline | None = None


@dataclass(frozen=True, slots=True)
class AngleReport:
    """How an orientation is told: three intrinsic turns about axes 0, 1, 2 (x, y, z).

    Attributes
    ----------
    axes : three ints
    signs : three of +1, -1
        -1 reverses the sign of the reported angle.
    names : three str
    """

    axes: tuple[int, int, int]
    signs: tuple[int, int, int]
    names: tuple[str, str, str]

    @property
    def sum_name(self) -> str:
        """The column that stays determined where the sequence is singular."""
        return f"{self.names[0]}_sum"


@dataclass(frozen=True, slots=True)
class Floating:
    """Six freedoms from the laboratory: a position (three coordinates) and an orientation."""

    position: tuple[str, str, str]
    angles: AngleReport


@dataclass(frozen=True, slots=True)
class Spherical:
    """Three rotational freedoms without a gimbal.

    The limits split R = swing . turn(y, twist), the swing being the shortest turn from the joint's
    Y to the child's. Twist is always counted about +y here: in a left twin, where the language
    counts it about -y, the mirror has already written its range negated, (-upper, -lower).

    Attributes
    ----------
    rest_sd : float or None
        rad per component of log R from the zero posture; None where there is no pull.
    cone : float or None
        rad, above 0 and at most pi: the largest angle of the child's Y from the joint's Y.
    twist : (lower, upper) or None
        rad, within [-pi, pi] and around 0.
    """

    angles: AngleReport
    rest_sd: float | None = None
    cone: float | None = None
    twist: tuple[float, float] | None = None


@dataclass(frozen=True, slots=True)
class Moves:
    """Elementary moves, applied in order from parent to child."""

    moves: tuple[Move, ...]


@dataclass(frozen=True, slots=True)
class Fixed:
    """No freedom."""


@dataclass(frozen=True, slots=True)
class Joint:
    """How a child segment hangs on its parent: parent . at . turned . motion . -in_child.

    Attributes
    ----------
    parent : str
        A segment, or ``laboratory``.
    at, in_child : Vector
        The joint centre in the parent and in the child, m of the reference person.
    turned : Turn, "upright" or None
        "upright" (only from the laboratory): the moves start from the upright frame.
    placed, placed_sd : Vector or None
        m in the *sized* parent, as calibration found a freed joint; wins over `at`, does not grow.
    axis_turn, axis_turn_sd : Vector or None
        rad: the rotation vector, in the parent, of the small turn T that makes every move M of the
        joint T M T^-1, as calibration found it; None where the joint's axes stand as written.
    """

    name: str
    parent: str
    child: str
    motion: Floating | Spherical | Moves | Fixed
    at: Vector = (0.0, 0.0, 0.0)
    in_child: Vector = (0.0, 0.0, 0.0)
    turned: Turn | Literal["upright"] | None = None
    placed: Vector | None = None
    placed_sd: Vector | None = None
    axis_turn: Vector | None = None
    axis_turn_sd: Vector | None = None


@dataclass(frozen=True, slots=True)
class Coordinate:
    """One number of a posture: free, held, or a function of another.

    Attributes
    ----------
    unit : "rad" or "m"
    lower, upper : float
        The range; infinite where unlimited.
    rest : float
        Where a fit starts and where an unseen coordinate stays.
    rest_sd : float or None
        A weak pull to `rest`; None is no pull.
    held : float or None
        Taken out of the fit, at this value.
    follows : str or None
        The coordinate that drives it; such a coordinate has no range, rest or pull of its own.
    """

    name: str
    unit: Literal["rad", "m"]
    lower: float = -inf
    upper: float = inf
    rest: float = 0.0
    rest_sd: float | None = None
    held: float | None = None
    follows: str | None = None

    @property
    def has_range(self) -> bool:
        """Whether a limit exists on either side."""
        return self.lower > -inf or self.upper < inf


@dataclass(frozen=True, slots=True)
class Marker:
    """A marker on a segment.

    Attributes
    ----------
    at : Vector or None
        m in the segment of the reference person; None where only the static can tell.
    landmark : str or None
        The landmark that `at` names.
    placed_within, sd : float
        m per axis: how far the real one may sit from `at`; the whole expected error of a frame.
    placed, placed_sd : Vector or None
        m in the *sized* segment, as calibration found it; wins over `at` and does not grow.
    about : str
        The place on the body in plain words, for the person who places it; may be empty.
    """

    name: str
    segment: str
    at: Vector | None = None
    landmark: str | None = None
    placed_within: float = 0.05
    sd: float = 0.006
    placed: Vector | None = None
    placed_sd: Vector | None = None
    about: str = ""


@dataclass(frozen=True, slots=True)
class MeetsPoint:
    """The tied point meets `point` of `segment`: three equations."""

    segment: str
    point: Vector


@dataclass(frozen=True, slots=True)
class OnPlane:
    """The tied point stays on a plane of the segment `of`: one equation.

    `through` grows with the segment; the unit `normal` keeps its direction, as joint axes do.
    """

    of: str
    through: Vector
    normal: Vector


@dataclass(frozen=True, slots=True)
class OnEllipsoid:
    """The tied point glides on an ellipsoid of the segment `of`: one equation.

    `centre` and `radii` (m, along the segment's x, y, z) grow with the segment, axis by axis.
    """

    of: str
    centre: Vector
    radii: Vector


@dataclass(frozen=True, slots=True)
class StaysAt:
    """The tied point stays `distance` (m) from `point` of `segment`: one equation.

    The two ends lie on two segments, so the distance is nobody's to grow: it stays as written.
    """

    segment: str
    point: Vector
    distance: float


@dataclass(frozen=True, slots=True)
class Tie:
    """A loop or a contact: a point of one segment and what it keeps to on another.

    Attributes
    ----------
    segment, point : str, Vector
        m in the segment of the reference person; grows with it. The segment may be ``laboratory``
        (the frame as recorded, which does not grow), here and in `kind`, but not in both.
    kind : MeetsPoint, OnPlane, OnEllipsoid or StaysAt
    sd : float
        m: how closely each equation is met.
    """

    name: str
    segment: str
    point: Vector
    kind: MeetsPoint | OnPlane | OnEllipsoid | StaysAt
    sd: float = 0.002

    @property
    def other(self) -> str:
        """The segment, or ``laboratory``, that the point is tied to."""
        kind = self.kind
        return kind.of if isinstance(kind, OnPlane | OnEllipsoid) else kind.segment


@dataclass(frozen=True, slots=True)
class SizeGroup:
    """One size factor: which axes of which segments it stretches.

    Attributes
    ----------
    name : str
        For reports, such as ``thigh_right+thigh_left along y``.
    members : (segment, axis index) pairs
    """

    name: str
    members: tuple[tuple[str, int], ...]


@dataclass(frozen=True, slots=True)
class Expected:
    """What is expected of a coordinate in the static trial (rad or m)."""

    value: float
    sd: float


@dataclass(frozen=True, slots=True)
class FreedJoint:
    """A joint whose centre or axes calibration may move.

    Attributes
    ----------
    place_sd : float or None
        m per axis about the grown place, in the parent; None where the centre is not freed.
    axis_sd : float or None
        rad per axis of the small turn T (see :attr:`Joint.axis_turn`); None where not freed.
    centre_from : str or None
        The published regression that counts as evidence for the centre. The centre is that of the
        right hip where the joint's `at` has z above 0, else of the left.
    """

    place_sd: float | None = None
    axis_sd: float | None = None
    centre_from: Regression | None = None


@dataclass(frozen=True, slots=True)
class Sizing:
    """What may differ between people, and by how much.

    Attributes
    ----------
    factor_sd : float
        Spread of ln(size factor) about this person's overall scale.
    groups : SizeGroups
        Together they cover every axis of every segment exactly once.
    standing : coordinate or reported angle -> Expected
    joints : joint -> FreedJoint
        Only those that are freed.
    """

    factor_sd: float
    groups: tuple[SizeGroup, ...]
    standing: Mapping[str, Expected] = field(default_factory=dict)
    joints: Mapping[str, FreedJoint] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Size:
    """A sized segment's growth factors for x, y, z, and their sd."""

    factors: Vector
    sd: Vector | None = None


@dataclass(frozen=True, slots=True)
class Person:
    """Whom the numbers describe: stature (m) and mass (kg)."""

    stature: float
    mass: float


@dataclass(frozen=True, slots=True)
class Skeleton:
    """A checked skeleton.

    Attributes
    ----------
    segments : in the order of `joints`
    joints : parents before children; joint i carries segment i
    coordinates : every named one, in the order the joints declare them
    ties : in the order of the file
    sizes : segment -> Size
        Empty for the reference person.
    person : Person or None
        Whom the file's numbers describe.
    subject : Person or None
        Whom a sized file describes (either number may be unknown there: NaN).
    labels : model marker name -> label in the recording
    up : str or None
        The up axis a sized file keeps, such as ``+Y``.
    calibration : what a sized file keeps of its origin, as written
    source : str
        The file it was read from.
    """

    name: str
    segments: tuple[Segment, ...]
    joints: tuple[Joint, ...]
    coordinates: tuple[Coordinate, ...]
    markers: tuple[Marker, ...]
    sizing: Sizing
    ties: tuple[Tie, ...] = ()
    about: str = ""
    sources: tuple[str, ...] = ()
    person: Person | None = None
    subject: Person | None = None
    sizes: Mapping[str, Size] = field(default_factory=dict)
    labels: Mapping[str, str] = field(default_factory=dict)
    up: str | None = None
    calibration: Mapping[str, object] = field(default_factory=dict)
    source: str = ""

    def segment_index(self, name: str) -> int:
        """Where a segment stands in `segments`."""
        return next(i for i, segment in enumerate(self.segments) if segment.name == name)

    def coordinate(self, name: str) -> Coordinate:
        """The coordinate of that name."""
        return next(c for c in self.coordinates if c.name == name)

    @property
    def marker_names(self) -> tuple[str, ...]:
        """In the order of `markers`."""
        return tuple(marker.name for marker in self.markers)

    @property
    def segment_names(self) -> tuple[str, ...]:
        """In the order of `segments`."""
        return tuple(segment.name for segment in self.segments)
