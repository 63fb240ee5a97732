"""What `fit.json` says of a fitted trial: errors, limits, what was not determined, and warnings."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from condyle.model.skeleton import Skeleton
from condyle.recording.recording import is_seen
from condyle.solver.quality import Finding, error_summary
from condyle.solver.results import TrialFit

CAUTION = (
    "A measuring aid, not a diagnosis: decisions on treatment or training belong to licensed "
    "practice."
)


def fit_report(
    fit: TrialFit, skeleton: Skeleton, findings: list[Finding], origin: Mapping[str, Any]
) -> dict[str, Any]:
    """Everything `fit.json` says."""
    motion = fit.motion
    error, used = motion.error, motion.used
    whole = error_summary(error, used)
    present = is_seen(motion.measured)
    placed = is_seen(motion.fitted)
    segment_of = {marker.name: marker.segment for marker in skeleton.markers}
    owner = np.array([segment_of[name] for name in motion.marker_names])
    return {
        "caution": CAUTION,
        **origin,
        "up": {"axis": motion.up, "how": motion.up_how},
        "frames": len(motion.time),
        "rate": fit.rate,
        "rms_error": whole.rms,
        "largest_error": whole.largest,
        "marker_frames": {
            "present": int((present & placed).sum()),
            "used": int(used.sum()),
        },
        "markers": {
            name: vars_of(error_summary(error[:, i], used[:, i]))
            for i, name in enumerate(motion.marker_names)
        },
        "segments": {
            name: vars_of(error_summary(error[:, owner == name], used[:, owner == name]))
            for name in motion.segment_names
        },
        "markers_without_label": [
            name for i, name in enumerate(motion.marker_names) if not present[:, i].any()
        ],
        "labels_not_in_model": list(fit.other_labels),
        "frames_not_converged": motion.frame[~fit.converged].tolist(),
        "largest_projected_gradient": float(fit.optimality.max(initial=0.0)),
        "limits_reached": {
            column.name: int(fit.at_limit[:, i].sum())
            for i, column in enumerate(fit.columns)
            if fit.at_limit[:, i].any()
        },
        "smoothing": _smoothing(fit),
        "uncertainty": _uncertainty(fit),
        "freedoms": {"without_ties": fit.freedoms, "taken_by_ties": fit.freedoms_tied},
        "ties": {name: {"largest_error": error} for name, error in fit.tie_errors.items()},
        "coordinates_not_observed": dict(fit.not_observed),
        "warnings": [{"what": f.what, "do": f.do, "needs_a_look": f.needs_look} for f in findings],
    }


def _smoothing(fit: TrialFit) -> dict[str, Any] | None:
    """How the trial was estimated as a whole."""
    smoothing = fit.smoothing
    if smoothing is None:
        return None
    return {
        "order": smoothing.order,
        "white_noise": smoothing.white_noise,
        "rounds": smoothing.rounds,
        "frames_bridged": dict(smoothing.bridged),
    }


def _uncertainty(fit: TrialFit) -> dict[str, Any]:
    """Which part of each number's variance comes from where."""
    return {
        "calibration": fit.calibration_how,
        "parts": {
            name: {
                "white_noise": shares.white,
                "markers_persisting": shares.persisting,
                "calibration": shares.calibration,
                "dominated_by": shares.dominant(),
            }
            for name, shares in fit.doubts.items()
        },
    }


def vars_of(summary: Any) -> dict[str, Any]:
    """The fields of an error summary, for JSON."""
    return {
        "rms_error": summary.rms,
        "largest_error": summary.largest,
        "marker_frames": summary.count,
    }
