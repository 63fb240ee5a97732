"""One process that draws every n-th picture of a film: ``python -m condyle.viz.film_worker``.

The job comes in on stdin, pickled by the process that started it; the pictures go out on stdout as raw bytes, one
after the other. A process of its own, not a thread, because a window belongs to the process that opened it; not
one of Python's worker pools either, because those run the user's own script again in every worker.
"""

from __future__ import annotations

import os
import pickle
import sys
from collections.abc import Iterator
from dataclasses import dataclass

from PIL import Image

from condyle.viz.drawn_markers import place_markers
from condyle.viz.extras import Forces, place_forces
from condyle.viz.figure import Figure
from condyle.viz.film_plan import FilmPlan
from condyle.viz.film_words import FilmWords
from condyle.viz.legend import draw_left_out
from condyle.viz.look import Look
from condyle.viz.scene import FILM_DETAIL, Scene


@dataclass(frozen=True, slots=True)
class Job:
    """What a worker needs to know.

    Attributes
    ----------
    forces : one a picture, or None where there are no plates
    first, step : this worker's pictures are first, first + step, ...
    """

    figure: Figure
    plan: FilmPlan
    look: Look
    forces: tuple[Forces, ...] | None
    first: int
    step: int


def draw(job: Job) -> Iterator[Image.Image]:
    """The worker's pictures, in order."""
    motion, look = job.figure.motion, job.look
    words = FilmWords(motion, job.plan, look, job.forces)
    with Scene(job.figure, look.size, theme=look.theme, detail=FILM_DETAIL) as scene:
        for picture in range(job.first, len(job.plan), job.step):
            row, camera = int(job.plan.rows[picture]), job.plan.cameras[picture]
            if job.forces is not None:
                place_forces(scene, job.forces[picture], camera.visible_height())
            large = scene.render(row, camera, exaggeration=look.exaggeration)
            markers = place_markers(motion, row, exaggeration=look.exaggeration)
            draw_left_out(large, markers, camera, look.theme)
            image = large.resize(look.size, Image.Resampling.BOX)
            words.write(image, picture)
            yield image


def main() -> None:
    """Draw the job on stdin to stdout."""
    out = os.fdopen(os.dup(sys.stdout.fileno()), "wb")
    os.dup2(sys.stderr.fileno(), sys.stdout.fileno())  # nothing else may write among the pictures
    job: Job = pickle.load(sys.stdin.buffer)
    for image in draw(job):
        out.write(image.tobytes())
    out.close()


if __name__ == "__main__":
    main()
