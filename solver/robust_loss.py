"""Losses that a few wrong markers cannot pull far, in place of the sum of squares.

With e = |r| / sd of a marker (3-D residual over the sd per axis) the frame's cost is sum rho(e^2) / 2:

    Huber (1964, Ann Math Stat 35:73)      rho = e^2 up to k^2, then 2 k e - k^2
    Geman & McClure (1985, Proc ASA 12)    rho = c^2 e^2 / (c^2 + e^2)

The second has many minima, so it is approached by graduated non-convexity (Yang et al. 2020, IEEE
Robot Autom Lett 5:1127): c^2 is made mu c^2, mu falling from where the loss is nearly convex to 1.
A loss enters the normal equations as weights rho'(e^2), so gradients, limits and the proof of a
minimum are those of the robust cost itself.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri

FloatArray = NDArray[np.float64]

HUBER_BEND = float(np.sqrt(chdtri(3, 0.05)))
"""e beyond which 5 % of sound markers lie: three independent normal axes."""
GEMAN_MCCLURE_SCALE = float(np.sqrt(chdtri(3, 0.01)))
MU_STEP = 1.4
"""By which mu falls (Yang et al. 2020)."""


class Loss(Protocol):
    """A loss as a function of e^2."""

    def value(self, squared: FloatArray) -> FloatArray:
        """Rho(e^2)."""

    def weight(self, squared: FloatArray) -> FloatArray:
        """Its derivative with respect to e^2: 1 for a sound marker."""

    def stages(self, largest: float) -> tuple[Loss, ...]:
        """What to minimise one after the other; `largest` is the greatest e^2 of the first fit."""


@dataclass(frozen=True, slots=True)
class Huber:
    """Quadratic up to a bend, then straight."""

    bend: float = HUBER_BEND

    def value(self, squared: FloatArray) -> FloatArray:
        """See `Loss`."""
        e = np.sqrt(squared)
        return np.asarray(np.where(e <= self.bend, squared, 2 * self.bend * e - self.bend**2))

    def weight(self, squared: FloatArray) -> FloatArray:
        """See `Loss`."""
        return np.asarray(np.minimum(1.0, self.bend / np.sqrt(np.maximum(squared, 1e-300))))

    def stages(self, largest: float) -> tuple[Loss, ...]:
        """See `Loss`: convex in the residuals, one stage."""
        return (self,)


@dataclass(frozen=True, slots=True)
class GemanMcClure:
    """Bounded: a marker far away weighs nothing."""

    scale: float = GEMAN_MCCLURE_SCALE
    mu: float = 1.0

    def value(self, squared: FloatArray) -> FloatArray:
        """See `Loss`."""
        c = self.mu * self.scale**2
        return np.asarray(c * squared / (c + squared))

    def weight(self, squared: FloatArray) -> FloatArray:
        """See `Loss`."""
        c = self.mu * self.scale**2
        return np.asarray((c / (c + squared)) ** 2)

    def stages(self, largest: float) -> tuple[Loss, ...]:
        """See `Loss`: mu from 2 e^2 / c^2 of the worst marker down to 1."""
        first = max(2 * largest / self.scale**2, 1.0)
        count = int(np.ceil(np.log(first) / np.log(MU_STEP)))
        return tuple(replace(self, mu=max(MU_STEP**k, 1.0)) for k in range(count, -1, -1))


LOSSES: dict[str, Loss | None] = {
    "squares": None,
    "huber": Huber(),
    "geman_mcclure": GemanMcClure(),
}
"""By the names that `condyle solve --loss` takes."""
