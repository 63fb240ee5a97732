"""A trial's system over all frames, solved by the compiled kernel and by LAPACK, against dense algebra."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.solver import compiled_trial, trial_system
from condyle.solver.backends import Backend, backend
from condyle.solver.block_banded import system_band
from condyle.solver.covariances import Covariances, all_pairs, joined
from condyle.solver.kernel_cache import load_kernel
from condyle.solver.kernel_source import kernel_source
from condyle.solver.packed_matrices import Pattern
from condyle.solver.posture import Posture
from condyle.solver.process_prior import ProcessPrior
from condyle.solver.time_derivatives import first_frames, formulas
from condyle.solver.trial_system import Sums, TrialSystem

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
SHAPES = [(frames, *shape) for frames in (12, 48, 49, 100) for shape in ((3, 0, 4), (5, 1, 3))]
SHAPES += [(53, 18, 2, 4), (20, 26, 1, 4)]
"""Frames, scalars, balls and order: chunks that are full and that are not, tiles of one vector to four."""


@pytest.fixture(params=["vectors", "numbers", "LAPACK"])
def solver(
    request: pytest.FixtureRequest,
    tmp_path_factory: pytest.TempPathFactory,
    monkeypatch: pytest.MonkeyPatch,
) -> str:
    """The compiled kernel with and without vectors, and LAPACK alone."""
    if request.param == "LAPACK":
        monkeypatch.setattr(trial_system, "backend", lambda: Backend("replay"))
    elif backend().library is None:
        pytest.skip("there is no compiler here")
    elif request.param == "numbers":
        monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.getbasetemp() / "kernels"))
        library = load_kernel("#define CONDYLE_SCALAR\n" + kernel_source()).library
        monkeypatch.setattr(trial_system, "backend", lambda: Backend("compiled", "", library))
    return str(request.param)


def made(
    frames: int, scalars: int, balls: int, order: int = 4, seed: int = 1
) -> tuple[TrialSystem, BoolArray]:
    """A system with a sparse pattern, gaps in its process, and some freedoms held."""
    rng = np.random.default_rng(seed)
    size = scalars + 3 * balls
    root = np.tril(rng.normal(0, 1, (frames, size, size)))
    root[:, rng.random((size, size)) < 0.6] = 0.0
    index = np.arange(size)
    root[:, index, index] = rng.uniform(1, 3, (frames, size))
    H = root @ np.swapaxes(root, 1, 2)
    rows, columns = np.nonzero(np.tril(np.abs(H).max(axis=0) > 0))
    pattern = Pattern(zip(rows.tolist(), columns.tolist(), strict=True), size)
    linked = rng.random((frames - order, size)) < 0.95
    linked[:, scalars:] = np.repeat(linked[:, scalars::3], 3, axis=1)
    prior = ProcessPrior(order, 10.0 ** rng.uniform(0, 4, size), linked)
    turns = np.cumsum(rng.normal(0, 0.1, (frames, balls, 4)), axis=0) + np.array([3.0, 0, 0, 0])
    posture = Posture(
        rng.normal(0, 1, (frames, scalars)), turns / np.linalg.norm(turns, axis=2)[..., None]
    )
    system = TrialSystem(pattern, pattern.packed(H), prior, prior.residuals(posture)[1])
    return system, rng.random((frames, size)) < 0.15


def dense(system: TrialSystem, held: BoolArray) -> FloatArray:
    """A with the rows and columns of held unknowns those of the identity."""
    band = system_band(system.dense(), system.prior, system.turns)
    size = band.shape[1]
    A = np.zeros((size, size))
    for below, diagonal in enumerate(band):
        part = diagonal[: size - below]
        A += np.diag(part, -below) + (np.diag(part, below) if below else 0.0)
    A[held.ravel()] = 0.0
    A[:, held.ravel()] = 0.0
    A[held.ravel(), held.ravel()] = 1.0
    return A


@pytest.mark.parametrize(("frames", "scalars", "balls", "order"), SHAPES)
def test_it_is_solved_and_multiplied_as_dense_algebra_says(
    solver: str, frames: int, scalars: int, balls: int, order: int
) -> None:
    system, held = made(frames, scalars, balls, order, seed=frames)
    rhs = np.random.default_rng(2).normal(0, 1, held.shape)
    A = dense(system, held)
    found = system.solve(rhs, held)
    assert found is not None
    np.testing.assert_allclose(found.ravel(), np.linalg.solve(A, rhs.ravel()), rtol=0, atol=1e-9)
    whole = dense(system, np.zeros_like(held))
    np.testing.assert_allclose(system.times(rhs).ravel(), whole @ rhs.ravel(), rtol=1e-9, atol=1e-8)
    np.testing.assert_allclose(system.diagonal().ravel(), np.diag(whole), rtol=1e-12)
    extra = np.random.default_rng(3).uniform(0, 5, held.shape)
    damped = np.linalg.solve(A + np.diag(np.where(held, 0, extra).ravel()), rhs.ravel())
    found = system.solve(rhs, held, extra)
    assert found is not None
    free = ~held
    np.testing.assert_allclose(found[free], damped.reshape(held.shape)[free], rtol=0, atol=1e-9)


@pytest.mark.parametrize(("frames", "scalars", "balls", "order"), SHAPES)
def test_its_covariances_are_those_of_the_dense_inverse(
    solver: str, frames: int, scalars: int, balls: int, order: int
) -> None:
    system, held = made(frames, scalars, balls, order, seed=frames)
    size = held.shape[1]
    wanted = all_pairs(size).pairs
    scale = np.random.default_rng(4).uniform(0.5, 2, len(wanted))
    weights = np.stack(formulas(frames, 1.0))
    begin = first_frames(frames)
    told = system.covariances(held, wanted, scale, Sums(begin, weights))
    inverse = np.linalg.inv(dense(system, held)).reshape(frames, size, frames, size)
    rows, columns = wanted.T
    for k in range(frames):
        expected = inverse[k, rows, k, columns] * scale
        np.testing.assert_allclose(told[0][k], expected, rtol=0, atol=1e-9)
        at = begin[k] + np.arange(5)
        joint = inverse[np.ix_(at, range(size), at, range(size))]
        for found, w in zip(told[1:], weights[:, k], strict=True):
            of_sum = np.einsum("a,aibj,b->ij", w, joint, w)[rows, columns] * scale
            np.testing.assert_allclose(found[k], of_sum, rtol=0, atol=1e-8)


def test_a_system_that_bends_down_has_no_solution(solver: str) -> None:
    system, held = made(60, 4, 1)
    values = system.values.copy()
    values[30] *= -1e9
    bent = TrialSystem(system.pattern, values, system.prior, system.turns)
    held[30] = False
    assert bent.solve(np.ones(held.shape), held) is None
    with pytest.raises(np.linalg.LinAlgError):
        bent.covariances(
            held,
            all_pairs(7).pairs,
            np.ones(28),
            Sums(first_frames(60), np.stack(formulas(60, 1.0))),
        )


def test_chunks_make_no_difference(monkeypatch: pytest.MonkeyPatch) -> None:
    if backend().library is None:
        pytest.skip("there is no compiler here")
    system, held = made(150, 6, 1)
    rhs = np.random.default_rng(5).normal(0, 1, held.shape)
    whole = system.solve(rhs, held)
    for chunk in (7, 150, 1):
        monkeypatch.setattr(compiled_trial, "CHUNK", chunk)
        np.testing.assert_array_equal(system.solve(rhs, held), whole)


def test_covariances_keep_what_is_asked_for() -> None:
    rng = np.random.default_rng(6)
    root = rng.normal(0, 1, (9, 4, 4))
    matrices = root @ np.swapaxes(root, 1, 2)
    pattern = Pattern([(0, 0), (1, 1), (2, 2), (3, 3), (3, 2)], 4)
    kept = Covariances(pattern, pattern.packed(matrices))
    np.testing.assert_array_equal(kept.block(np.array([2, 3])), matrices[:, 2:, 2:])
    np.testing.assert_array_equal(kept.variances(), np.einsum("nii->ni", matrices))
    np.testing.assert_array_equal(np.asarray(kept)[:, 0, 1], 0.0)
    np.testing.assert_array_equal(np.asarray(kept)[:, 2, 3], matrices[:, 2, 3])
    with pytest.raises(KeyError, match="not kept"):
        kept.block(np.array([0, 1]))
    parts = joined([kept.take(slice(0, 4)), kept.take(slice(4, 9))])
    np.testing.assert_array_equal(parts.values, kept.values)
    told = rng.random((9, 4)) < 0.5
    both = told[:, 2] & told[:, 3]
    only = np.asarray((kept + kept).only(told))
    np.testing.assert_array_equal(only[:, 3, 2], np.where(both, 2 * matrices[:, 3, 2], 0.0))
