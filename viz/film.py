"""Films: pictures drawn by one process a core, in order into a coder, whole into the folder or not at all.

The coder (H.264 for MP4, a palette for GIF) is ffmpeg as the imageio-ffmpeg package brings it. The workers and
the coder have no part in Ctrl-C: only this process hears it, ends them, and leaves nothing behind.
"""

from __future__ import annotations

import os
import pickle
import signal
import subprocess
import sys
import tempfile
from collections.abc import Callable, Generator, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import IO

from condyle.model.whole_files import whole_file
from condyle.solver.results import FittedMotion
from condyle.viz.extras import Forces
from condyle.viz.figure import Figure, build_figure
from condyle.viz.film_plan import RATE, FilmError, FilmPlan, film_rows, plan_film
from condyle.viz.film_words import film_room, film_setting
from condyle.viz.film_worker import Job
from condyle.viz.look import Look
from condyle.viz.offscreen import WINDOW_VARIABLE, choose_window

QUALITY = 20
"""H.264's constant rate factor: 18 cannot be told from the original, 23 is its default."""

GIF_EVERY = 2
"""Every so many-th picture goes into a GIF: 12.5 a second is a whole number of its clock's hundredths."""

GIF_SMALLER = 2
"""A GIF is so many times smaller in each direction."""

GIF_FILTER = (
    "split[a][b];[a]palettegen=max_colors=160:stats_mode=full[p];"
    "[b][p]paletteuse=dither=bayer:bayer_scale=4:diff_mode=rectangle"
)

Watch = Callable[[float], None]


@dataclass(frozen=True, slots=True)
class Film:
    """A film that was written."""

    files: list[Path]
    pictures: int
    seconds: float


def draw_film(
    motion: FittedMotion,
    files: list[Path],
    look: Look | None = None,
    *,
    start: float | None = None,
    end: float | None = None,
    speed: float = 1.0,
    rate: float = RATE,
    forces: Callable[[int], Forces] | None = None,
    workers: int | None = None,
    watch: Watch | None = None,
) -> Film:
    """Film a motion into some files, each .mp4 or .gif.

    Parameters
    ----------
    start, end : float, optional
        s, on the recording's clock.
    speed : float
        1 is real time, 0.25 four times slower.
    rate : float
        Pictures per second of film.
    forces : callable, optional
        Of a row of the motion: what force plates felt then.
    workers : int, optional
        Processes that draw; by default one a core.
    watch : callable, optional
        Told the share of the work done.

    Raises
    ------
    FilmError
        For what cannot be filmed, or a worker that failed.
    NoGraphicsError
        Where the machine cannot draw.
    CondyleError
        Where the system refuses a file; then there is no file, as when interrupted.
    """
    for file in files:
        film_kind(file)
    look = even_sized(look or Look())
    rows = film_rows(motion, start=start, end=end, speed=speed, rate=rate)
    window = choose_window()
    figure = build_figure(motion)
    felt = None if forces is None else tuple(forces(int(row)) for row in rows)
    room = film_room(film_setting(motion, rows.tolist(), look, felt))
    plan = plan_film(figure, rows, look, room, speed=speed, rate=rate)
    with ExitStack() as stack:
        besides = [stack.enter_context(whole_file(file)) for file in files]
        coders = [stack.enter_context(coder(path, look.size, rate)) for path in besides]
        drawn = stack.enter_context(drawing(figure, plan, look, felt, workers or cores(), window))
        for number, picture in enumerate(drawn, start=1):
            for coding in coders:
                coding(picture, number - 1)
            if watch is not None:
                watch(number / len(plan))
    return Film(files, len(plan), len(plan) / rate)


def film_kind(path: Path | str) -> str:
    """``mp4`` or ``gif``, by the path's ending.

    Raises
    ------
    FilmError
        Where it is neither.
    """
    ending = Path(path).suffix.lower()
    if ending not in (".mp4", ".gif"):
        raise FilmError(f"{path}: '{ending}' is no kind of film here; '.mp4' or '.gif' would be.")
    return ending[1:]


def even_sized(look: Look) -> Look:
    """The look with an even width and height, as H.264 codes colours by blocks of two."""
    width, height = look.size
    return replace(look, size=(width - width % 2, height - height % 2))


def cores() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


@contextmanager
def drawing(
    figure: Figure,
    plan: FilmPlan,
    look: Look,
    forces: tuple[Forces, ...] | None,
    workers: int,
    window: str | None,
) -> Iterator[Iterator[bytes]]:
    """Inside the block, the film's pictures in order as raw bytes; after it, no worker runs."""
    count = max(1, min(workers, len(plan)))
    with ExitStack() as stack:
        started = []
        for first in range(count):
            complaints = stack.enter_context(tempfile.TemporaryFile())
            job = Job(figure, plan, look, forces, first, count)
            worker = start_worker(window, complaints)
            stack.callback(end_worker, worker)
            started.append((worker, complaints, job))
        for worker, complaints, job in started:
            try:
                give(worker, job)
            except OSError as fault:
                raise _failed(worker, complaints) from fault
        yield _in_order([(w, c) for w, c, _ in started], plan, 3 * look.size[0] * look.size[1])


def start_worker(window: str | None, complaints: IO[bytes]) -> subprocess.Popen[bytes]:
    """Start a worker that hears no Ctrl-C and uses one core."""
    environment = {
        **os.environ,
        "EGL_LOG_LEVEL": "fatal",
        "LP_NUM_THREADS": "0",  # Mesa draws in the calling thread: a core a worker, nothing handed over
        "OMP_NUM_THREADS": "1",
        "OPENBLAS_NUM_THREADS": "1",
        **({WINDOW_VARIABLE: window} if window else {}),
    }
    return subprocess.Popen(
        [sys.executable, "-m", "condyle.viz.film_worker"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=complaints,
        env=environment,
        start_new_session=True,
    )


def give(worker: subprocess.Popen[bytes], job: Job) -> None:
    """Send a worker its job."""
    if worker.stdin is not None:
        pickle.dump(job, worker.stdin, protocol=pickle.HIGHEST_PROTOCOL)
        worker.stdin.close()


def end_worker(worker: subprocess.Popen[bytes]) -> None:
    """End a worker, done or not, and wait until it is gone."""
    for stream in (worker.stdin, worker.stdout):
        if stream is not None:
            try:
                stream.close()
            except OSError:  # the pipe of a worker that is gone
                continue
    worker.terminate()
    try:
        worker.wait(timeout=5.0)
    except subprocess.TimeoutExpired:
        worker.kill()
        worker.wait()


def _in_order(
    workers: list[tuple[subprocess.Popen[bytes], IO[bytes]]], plan: FilmPlan, size: int
) -> Iterator[bytes]:
    for picture in range(len(plan)):
        worker, complaints = workers[picture % len(workers)]
        data = b"" if worker.stdout is None else worker.stdout.read(size)
        if len(data) != size:
            raise _failed(worker, complaints)
        yield data


def _failed(worker: subprocess.Popen[bytes], complaints: IO[bytes]) -> FilmError:
    status = worker.wait()
    complaints.seek(0)
    lines = complaints.read().decode(errors="replace").strip().splitlines()
    why = lines[-1] if lines else f"status {status}"
    return FilmError(
        f"a process that draws the film stopped ({why}).\n"
        "  Try a smaller --size; if that fails too, please report it."
    )


@contextmanager
def coder(path: Path, size: tuple[int, int], rate: float) -> Iterator[Callable[[bytes, int], None]]:
    """Inside the block, a function that takes each picture and its number; after it, a film at `path`."""
    import imageio_ffmpeg

    if film_kind(path) == "mp4":
        every, smaller = 1, 1
        codec = {"codec": "libx264", "pix_fmt_out": "yuv420p"}
        parameters = ["-crf", str(QUALITY), "-preset", "medium", "-movflags", "+faststart"]
        filters: list[str] = []
    else:
        every, smaller = GIF_EVERY, GIF_SMALLER
        codec = {"codec": "gif", "pix_fmt_out": "pal8"}
        small = f"scale={size[0] // smaller}:{size[1] // smaller}:flags=area"
        filters = ["-filter_complex", f"[0:v]{small},{GIF_FILTER}"]
        parameters = []
    with uninterrupted():
        writer: Generator[None, bytes | None, None] = imageio_ffmpeg.write_frames(
            str(path),
            size,
            fps=rate / every,
            quality=None,
            macro_block_size=1,
            output_params=[*filters, *parameters],
            ffmpeg_log_level="fatal",  # an interrupted film would complain of itself
            **codec,
        )
        writer.send(None)

    def take(picture: bytes, number: int) -> None:
        if number % every:
            return
        try:
            writer.send(picture)
        except OSError as fault:  # the coder is gone; what it said is mostly about the disk
            raise FilmError(
                f"{path.name}: the coder stopped in the middle of the film.\n"
                "  Is the disk full? Free some space, or write to another disk with -o."
            ) from fault

    try:
        yield take
    finally:
        writer.close()


@contextmanager
def uninterrupted() -> Iterator[None]:
    """Inside the block Ctrl-C waits, and what is started there never hears it."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)
