"""What is expected of a person before any marker is looked at, and what the person told.

    (ln f_g - ln S) / factor_sd,   (ln S - ln S0) / s_S            sizes about the overall scale
    departure / place_sd,   turn / axis_sd                         freed joints
    L^-1 (centre - regressed centre)                               hips beside the pelvis' landmarks
    (length - tape) / TAPE_SD                                      what a tape measured

Every row is over its sd. The regression stands between *estimated* landmarks and centre, so measured
landmarks are not counted twice. Errors of both hips are correlated: they are one pelvis.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Literal

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import Expression, rotation_of_turn
from condyle.model.errors import FitError
from condyle.model.freed_joints import SPINES
from condyle.model.skeleton import LABORATORY, Joint, Regression, Skeleton, Turn, Vector
from condyle.solver.hip_regressions import (
    CORRELATION_OF_SIDES,
    needs_leg_length,
    published_sd,
    regressed_centre,
)
from condyle.solver.person_functions import PersonLayout, factors_expression

FloatArray = NDArray[np.float64]

SCALE_SD, SCALE_SD_WITH_STATURE = 0.10, 0.01
"""Of ln(overall scale), without and with a measured stature (the language's rule)."""
TAPE_SD = 0.01
"""m; a length taken with a tape over soft tissue [common practice: 5 to 15 mm between two who measure]."""


@dataclass(frozen=True, slots=True)
class Given:
    """What the person told.

    Attributes
    ----------
    stature : float or None
        m.
    lengths : segment -> m, with a tape
    """

    stature: float | None = None
    lengths: Mapping[str, float] | None = None


class PersonPriors:
    """The expectations of a skeleton, as residuals of a person's vector.

    Attributes
    ----------
    labels : (rows,)
        What each residual is about, in words.
    """

    def __init__(self, skeleton: Skeleton, layout: PersonLayout, given: Given) -> None:
        person = ca.SX.sym("person", layout.size)
        rows: list[tuple[str, Expression]] = []
        scale = person[layout.scale]
        for g, group in enumerate(skeleton.sizing.groups):
            rows.append((f"size of {group.name}", (person[g] - scale) / skeleton.sizing.factor_sd))
        expected, scale_sd = 0.0, SCALE_SD
        if given.stature is not None and skeleton.person is not None:
            expected = float(np.log(given.stature / skeleton.person.stature))
            scale_sd = SCALE_SD_WITH_STATURE
        rows.append(("overall scale", (scale - expected) / scale_sd))
        for name in layout.placed:
            sd = skeleton.sizing.joints[name].place_sd
            if sd is not None:
                rows.append((f"centre of {name}", person[layout.centre(name)] / sd))
        for name in layout.turned:
            sd = skeleton.sizing.joints[name].axis_sd
            if sd is not None:
                rows.append((f"axes of {name}", person[layout.turn(name)] / sd))
        body = _Body(skeleton, layout, person)
        rows += _regressions(body)
        for segment, length in (given.lengths or {}).items():
            rows.append((f"tape on {segment}", (body.length(segment) - length) / TAPE_SD))
        residual = ca.densify(ca.vertcat(*[row for _, row in rows]))
        self.labels = tuple(label for label, row in rows for _ in range(ca.SX(row).numel()))
        J = ca.densify(ca.jacobian(residual, person))
        self._evaluate = ca.Function("priors", [person], [residual, J])

    def __call__(self, person: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Residuals (rows,) over their sd, and (rows, person) derivatives."""
        residual, J = self._evaluate(person)
        return np.asarray(residual).ravel(), np.asarray(J)


@dataclass(frozen=True, slots=True)
class _Body:
    """Places on the sized skeleton, as expressions of a person's vector."""

    skeleton: Skeleton
    layout: PersonLayout
    person: Expression

    def grown(self, segment: str, place: Vector) -> Expression:
        """(3) m, a place of the reference person in the sized segment."""
        factors = factors_expression(self.skeleton, self.person[self.layout.sizes])
        row = 3 * self.skeleton.segment_index(segment)
        return factors[row : row + 3] * ca.DM(place)

    def centre(self, joint: Joint) -> Expression:
        """(3) m, a joint's centre in its sized parent."""
        centre = self.grown(joint.parent, joint.at)
        if joint.name in self.layout.placed:
            centre = centre + self.person[self.layout.centre(joint.name)]
        return centre

    def length(self, segment: str) -> Expression:
        """m, what a tape would measure; an end at a child's joint centre goes where that goes.

        Raises
        ------
        FitError
            If the skeleton has no such segment, or no length of it.
        """
        found = next((s for s in self.skeleton.segments if s.name == segment), None)
        if found is None or found.length is None:
            known = [s.name for s in self.skeleton.segments if s.length is not None]
            raise FitError(
                f"{self.skeleton.name} has no segment {segment} with a length to measure.\n"
                f"  Those with one: {', '.join(known)}."
            )
        ends = [self._end(segment, end) for end in found.length]
        return ca.norm_2(ends[1] - ends[0])

    def _end(self, segment: str, end: Vector) -> Expression:
        for joint in self.skeleton.joints:
            if joint.parent == segment and joint.at == end:
                return self.centre(joint)
        return self.grown(segment, end)

    def landmarks(self, segment: str) -> Callable[[str], Expression]:
        """Landmark name -> (3) m in the sized segment."""
        places = self.skeleton.segments[self.skeleton.segment_index(segment)].landmarks
        return lambda name: self.grown(segment, places[name])

    def leg_length(self, hip: Joint, side: str) -> Expression:
        """m, from the spine of that side to the inner ankle with all coordinates zero.

        Raises
        ------
        FitError
            If no segment below the hip has that landmark.
        """
        name = f"MM_{side}"
        for joint in self.skeleton.joints:
            segment = self.skeleton.segments[self.skeleton.segment_index(joint.child)]
            chain = self._up_to(joint, hip)
            if name in segment.landmarks and chain:
                place = self.grown(segment.name, segment.landmarks[name])
                for step in chain:
                    turn = step.turned if isinstance(step.turned, Turn) else None
                    place = place - self.grown(step.child, step.in_child)
                    place = self.centre(step) + ca.DM(rotation_of_turn(turn)) @ place
                return ca.norm_2(place - self.landmarks(hip.parent)(f"ASIS_{side}"))
        raise FitError(
            f"the centre of {hip.name} is to come from the length of the leg, and no segment below it "
            f"has a landmark {name}.\n  Add it, or choose harrington_2007, which does without."
        )

    def _up_to(self, joint: Joint, top: Joint) -> list[Joint]:
        """The joints from one up to another, both included; empty where that is not above."""
        by_child = {j.child: j for j in self.skeleton.joints}
        chain = [joint]
        while chain[-1].name != top.name:
            if chain[-1].parent == LABORATORY:
                return []
            chain.append(by_child[chain[-1].parent])
        return chain


def _regressions(body: _Body) -> list[tuple[str, Expression]]:
    """Every hip beside what a regression says; hips of one pelvis by one regression go together."""
    together: dict[tuple[str, Regression], list[Joint]] = {}
    for joint in body.skeleton.joints:
        freed = body.skeleton.sizing.joints.get(joint.name)
        if freed is not None and freed.centre_from is not None:
            together.setdefault((joint.parent, freed.centre_from), []).append(joint)
    rows = []
    for (pelvis, regression), joints in together.items():
        spines = [body.landmarks(pelvis)(name) for name in SPINES]
        away = []
        for joint in joints:
            side: Literal["right", "left"] = "right" if joint.at[2] > 0 else "left"
            leg = body.leg_length(joint, side) if needs_leg_length(regression) else None
            found = regressed_centre(regression, *spines, leg_length=leg, side=side)
            outward = 1.0 if side == "right" else -1.0
            away.append((body.centre(joint) - found) * ca.DM([1.0, 1.0, outward]))
        same = np.full((len(joints), len(joints)), CORRELATION_OF_SIDES)
        np.fill_diagonal(same, 1.0)
        whiten = np.linalg.inv(np.linalg.cholesky(same))
        whole = ca.horzcat(*[a / ca.DM(list(published_sd(regression))) for a in away]) @ ca.DM(
            whiten.T
        )
        rows += [(f"{regression} for {j.name}", whole[:, i]) for i, j in enumerate(joints)]
    return rows
