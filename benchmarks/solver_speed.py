"""Speed of the batched fit as ratios to general-purpose optimisers on the same problem.

Usage: OPENBLAS_NUM_THREADS=1 python benchmarks/solver_speed.py [MODEL] [FRAMES]

(Matrices here are small: threads of BLAS that wait for work slow everyone down, us and the peers.)

One run, interleaved rounds, medians and per-round ratios: made-up movement over half of each range,
2 mm noise, 5 % missing, each frame fitted within its limits. Ours starts cold, in each backend, and
its time holds everything from markers to covariances. The peers start warm, from the solution of the
frame before, with exact derivatives by CasADi; they are timed on a sample of frames and told per
frame. All must reach the same costs.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from statistics import median
from time import perf_counter
from typing import Any

import casadi as ca
import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Spherical
from condyle.solver.backends import VARIABLE
from condyle.solver.frame_fit import FrameFits, fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
ROUNDS, SAMPLE, NOISE, MISSING = 5, 25, 0.002, 0.05
COST_UNIT = 100.0
"""What a frame's cost is divided by for the nonlinear programming peers, which have absolute tolerances."""


def made_up(functions: SkeletonFunctions, frames: int) -> tuple[FrameProblem, Posture]:
    """A movement that uses half of each range, seen by noisy markers with gaps."""
    rng = np.random.default_rng(7)
    skeleton = functions.skeleton
    time = np.arange(frames) / 100.0
    free = [c for c in skeleton.coordinates if c.follows is None]
    columns = []
    for coordinate in free:
        limited = np.isfinite(coordinate.lower) and np.isfinite(coordinate.upper)
        middle = (coordinate.lower + coordinate.upper) / 2 if limited else 0.0
        half = (coordinate.upper - coordinate.lower) / 2 if limited else 0.3
        columns.append(middle + 0.5 * half * np.sin(2 * np.pi * (0.7 * time + rng.random())))
    scalars = np.column_stack(columns)
    balls = len(functions.kinematics.freedoms.balls)
    still = Posture(scalars, np.tile([1.0, 0, 0, 0], (frames, balls, 1)))
    sway = 0.3 * np.sin(2 * np.pi * (0.4 * time[:, None] + rng.random(3 * balls)))
    truth = still.after(np.concatenate([np.zeros_like(scalars), sway], axis=1))
    numbers = sized_numbers(skeleton, np.eye(3))
    seen = rng.random((frames, len(skeleton.markers))) >= MISSING
    noisy = functions.marker_positions(truth, numbers) + rng.normal(
        0, NOISE, (frames, len(skeleton.markers), 3)
    )
    sd = np.array([marker.sd for marker in skeleton.markers])
    measured = np.where(seen[..., None], noisy, 0.0)
    return FrameProblem(functions, measured, seen / sd**2, numbers), truth


class Peers:
    """One frame's problem as general-purpose optimisers take it.

    The unknown is a step from a base posture: scalars by addition, orientations by the quaternion
    (1, d / 2) of unit length, which reaches every turn below half a turn without a singularity.
    """

    def __init__(self, problem: FrameProblem) -> None:
        if problem.functions.limited_balls or len(problem.functions.ties):
            raise SystemExit("the peers know neither ties nor limits of spherical joints")
        self.problem, self.bounds = problem, problem.bounds()
        kinematics = problem.functions.kinematics
        step = ca.SX.sym("step", kinematics.freedoms.size)
        scalars = ca.SX.sym("base_scalars", len(kinematics.freedoms.scalars))
        quaternions = ca.SX.sym("base_quaternions", 4 * len(kinematics.freedoms.balls))
        measured = ca.SX.sym("measured", 3 * len(kinematics.skeleton.markers))
        root = ca.SX.sym("root_weights", measured.numel())
        after = [scalars + step[: scalars.numel()]]
        after += [
            _after(quaternions[4 * b : 4 * b + 4], step[kinematics.freedoms.ball_slice(b)])
            for b in range(len(kinematics.freedoms.balls))
        ]
        residuals = ca.vertcat(root * (measured - kinematics.marker_positions), _pulls(kinematics))
        residuals = ca.substitute(
            [residuals],
            [kinematics.scalars, kinematics.quaternions, kinematics.numbers],
            [after[0], ca.vertcat(ca.SX(0, 1), *after[1:]), ca.SX(ca.DM(problem.numbers))],
        )[0]
        J = ca.jacobian(residuals, step)
        self.given = ca.vertcat(scalars, quaternions, measured, root)
        self.step, self.cost = step, ca.sumsqr(residuals) / 2 / COST_UNIT
        self.function = ca.Function(
            "residuals", [step, self.given], [residuals, ca.densify(J)], {"cse": True}
        )
        scale, multiplier = ca.SX.sym("scale"), ca.SX.sym("multiplier", 0)
        self.gauss_newton = ca.Function(
            "nlp_hess_l",
            [step, self.given, scale, multiplier],
            [scale * (J.T @ J) / COST_UNIT],
            ["x", "p", "lam_f", "lam_g"],
            ["hess_gamma_x_x"],
            {"cse": True},
        )

    def frame(self, row: int, fitted: Posture) -> tuple[FloatArray, FloatArray, FloatArray]:
        """What is given, and the least and largest step, from the posture of the frame before."""
        base = fitted.take(np.array([max(row - 1, 0)]))
        root = np.sqrt(np.repeat(self.problem.weights[row], 3))
        given = [base.scalars[0], base.quaternions[0].ravel(), self.problem.measured[row].ravel()]
        pinned = self.bounds.pinned[row]
        low, high = np.full(len(pinned), -np.inf), np.full(len(pinned), np.inf)
        count = base.scalars.shape[1]
        low[:count] = self.bounds.lower[row] - base.scalars[0]
        high[:count] = self.bounds.upper[row] - base.scalars[0]
        low[pinned] = high[pinned] = 0.0
        return np.concatenate([*given, root]), np.minimum(low, 0.0), np.maximum(high, 0.0)

    def scipy_trf(self) -> Callable[[FloatArray, FloatArray, FloatArray], float]:
        """Scipy's trust-region reflective least squares, with the analytic Jacobian."""
        size, count = self.step.numel(), self.function.numel_out(0)
        buffer, evaluate = self.function.buffer()
        x, r, J = np.zeros(size), np.zeros(count), np.zeros((size, count))
        for array, place, i in ((x, buffer.set_arg, 0), (r, buffer.set_res, 0)):
            place(i, array.data)
        buffer.set_res(1, J.reshape(-1).data)

        def solve(given: FloatArray, low: FloatArray, high: FloatArray) -> float:
            buffer.set_arg(1, given.data)
            moving = low < high

            def at(step: FloatArray) -> None:
                x[:] = 0.0
                x[moving] = step
                evaluate()

            def residuals(step: FloatArray) -> FloatArray:
                at(step)
                return r.copy()

            def jacobian(step: FloatArray) -> FloatArray:
                at(step)
                return J[moving].T.copy()

            lo, hi = low[moving], high[moving]
            start = np.clip(0.0, lo + 1e-9, hi - 1e-9) * np.ones(moving.sum())
            options: dict[str, Any] = {"method": "trf"}
            options |= {"xtol": 1e-10, "ftol": 1e-12, "gtol": 1e-10}
            return float(least_squares(residuals, start, jacobian, (lo, hi), **options).cost)

        return solve

    def casadi(
        self, plugin: str, options: dict[str, Any]
    ) -> Callable[[FloatArray, FloatArray, FloatArray], float]:
        """A nonlinear programming solver of CasADi."""
        problem = {"x": self.step, "p": self.given, "f": self.cost}
        solver = ca.nlpsol("solver", plugin, problem, {"print_time": False, **options})

        def solve(given: FloatArray, low: FloatArray, high: FloatArray) -> float:
            return COST_UNIT * float(solver(x0=0, p=given, lbx=low, ubx=high)["f"])

        return solve


def _after(quaternion: ca.SX, step: ca.SX) -> ca.SX:
    """Q (1, d / 2), of unit length."""
    w, v, half = quaternion[0], quaternion[1:4], step / 2
    turned = ca.vertcat(w - ca.dot(v, half), w * half + v + ca.cross(v, half))
    return turned / ca.sqrt(1 + ca.sumsqr(half))


def _pulls(kinematics: Any) -> ca.SX:
    """The residuals of every pull to rest."""
    freedoms, rows = kinematics.freedoms, [ca.SX(0, 1)]
    for coordinate in kinematics.skeleton.coordinates:
        if coordinate.follows is None and coordinate.rest_sd is not None:
            place = freedoms.scalars.index(coordinate.name)
            rows.append((coordinate.rest - kinematics.scalars[place]) / coordinate.rest_sd)
    for joint in kinematics.skeleton.joints:
        if isinstance(joint.motion, Spherical) and joint.motion.rest_sd is not None:
            ball = freedoms.balls.index(joint.name)
            q = kinematics.quaternions[4 * ball : 4 * ball + 4]
            q = ca.if_else(q[0] < 0, -q, q)
            sine = ca.sqrt(ca.sumsqr(q[1:4]) + 1e-24)
            rows.append(2 * ca.atan2(sine, q[0]) / sine * q[1:4] / joint.motion.rest_sd)
    return ca.vertcat(*rows)


QUIET_QP = {"print_iter": False, "print_header": False, "error_on_fail": False}


def peers(problem: FrameProblem) -> dict[str, Callable[..., float]]:
    """Name -> what solves one frame from the frame before."""
    made = Peers(problem)
    sequential = {
        "hess_lag": made.gauss_newton,
        "qpsol": "qrqp",
        "qpsol_options": QUIET_QP,
        "tol_du": 1e-6,
        "min_step_size": 1e-12,
        "print_header": False,
        "print_iteration": False,
        "print_status": False,
    }
    interior = {
        "ipopt.print_level": 0,
        "ipopt.sb": "yes",
        "ipopt.tol": 1e-10,
        "ipopt.mu_init": 1e-5,
        "ipopt.warm_start_init_point": "yes",
        "ipopt.warm_start_bound_push": 1e-8,
        "ipopt.bound_relax_factor": 0.0,
    }
    return {
        "scipy trf, J": made.scipy_trf(),
        "CasADi sqpmethod, qrqp, J'J": made.casadi("sqpmethod", sequential),
        "CasADi IPOPT, exact Hessian": made.casadi("ipopt", interior),
    }


def timed(solve: Callable[..., float], frames: list[Any]) -> tuple[float, FloatArray]:
    """Seconds per frame, and the costs reached."""
    began = perf_counter()
    costs = [solve(*frame) for frame in frames]
    return (perf_counter() - began) / len(frames), np.array(costs)


def main() -> None:
    model = sys.argv[1] if len(sys.argv) > 1 else "full_body"
    frames = int(sys.argv[2]) if len(sys.argv) > 2 else 1000
    problems = {}
    for backend in ("compiled", "replay"):
        os.environ[VARIABLE] = backend
        problems[backend], _ = made_up(SkeletonFunctions(load_skeleton(model)), frames)
    others = peers(problems["replay"])
    sample = np.linspace(1, frames - 1, SAMPLE).astype(np.int64)
    seconds: dict[str, list[float]] = {name: [] for name in (*problems, *others)}
    fits: dict[str, FrameFits] = {}
    above: dict[str, float] = dict.fromkeys(seconds, -np.inf)
    made = Peers(problems["replay"])
    for _ in range(ROUNDS):
        for backend, problem in problems.items():
            os.environ[VARIABLE] = backend
            began = perf_counter()
            fits[backend] = fit_frames(problem)
            seconds[backend].append((perf_counter() - began) / frames)
        reached = fits["compiled"].solution
        given = [made.frame(int(row), reached.posture) for row in sample]
        for name, solve in others.items():
            took, costs = timed(solve, given)
            seconds[name].append(took)
            above[name] = max(above[name], float(np.max(costs / reached.cost[sample] - 1)))
    above["replay"] = float(np.max(fits["replay"].solution.cost / reached.cost - 1))
    above["compiled"] = 0.0
    functions = problems["compiled"].functions
    print(
        f"{model}: {functions.kinematics.freedoms.size} freedoms, "
        f"{len(functions.skeleton.markers)} markers, {frames} frames; medians of {ROUNDS} rounds; "
        f"{100 * reached.converged.mean():.1f} % converged"
    )
    print(f"  {'':30}{'us a frame':>12}{'over compiled':>24}{'over replay':>24}{'cost above':>12}")
    for name, taken in seconds.items():
        told = [_ratio(taken, seconds[backend]) for backend in problems]
        print(f"  {name:30}{1e6 * median(taken):12.0f}{told[0]}{told[1]}{above[name]:12.1e}")


def _ratio(taken: list[float], ours: list[float]) -> str:
    ratios = sorted(t / o for t, o in zip(taken, ours, strict=True))
    return f"{median(ratios):12.2f} ({ratios[0]:.1f}-{ratios[-1]:.1f})".rjust(24)


if __name__ == "__main__":
    main()
