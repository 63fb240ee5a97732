"""`condyle movie`: a film of every solved trial in a folder."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from condyle.model.errors import CondyleError
from condyle.picturing import camera_named, plate_forces
from condyle.pipeline import trial_folders
from condyle.solver.result_files import load_motion


@dataclass(frozen=True, slots=True)
class Movie:
    """One trial's film.

    Attributes
    ----------
    files : what was written
    pictures : how many it has
    seconds : how long it runs
    notes : what is worth saying about it
    """

    files: list[Path]
    pictures: int
    seconds: float
    notes: list[str]


def movie(
    folder: str | Path,
    *,
    start: float | None = None,
    end: float | None = None,
    speed: float = 1.0,
    view: str = "oblique",
    size: tuple[int, int] | None = None,
    exaggerate: float = 3.0,
    theme: str = "light",
    gif: bool = False,
    output: str | Path | None = None,
    watch: Callable[[str, float], None] | None = None,
) -> list[Movie]:
    """Film the fitted skeleton with the markers measured, for every solved trial in a folder.

    Parameters
    ----------
    folder : what `solve` wrote, for one trial or for several
    start, end : s, on the recording's clock
    speed : 1 is real time, 0.25 four times slower
    view : ``front``, ``side``, ``top``, ``oblique``, or a camera's YAML file, which then stands still
    size : (width, height) pixels, made even
    exaggerate : how many times longer residuals are drawn
    theme : ``light`` or ``dark``
    gif : whether a GIF is written too, half as large and half as many pictures a second
    output : FILE.mp4 or FILE.gif, for one trial
    watch : told the trial's name and the share of its work done

    Returns
    -------
    One for each trial: ``movie.mp4`` in its folder, and ``movie.gif`` where asked for.

    Raises
    ------
    CondyleError
        For times, a view, size, speed or theme that there is not, a folder without a solved trial, or a
        machine that cannot draw. Films appear whole or not at all.
    """
    from condyle.viz.film import draw_film, film_kind
    from condyle.viz.look import SHAPE, Look
    from condyle.viz.theme import theme_called

    folders = trial_folders(Path(folder))
    if output is not None:
        film_kind(output)
        if len(folders) > 1:
            raise CondyleError(
                f"{folder}: one file cannot hold the films of several trials.\n"
                f"  Name one trial's folder: {', '.join(path.name for path in folders)}."
            )
    made = []
    for trial in folders:
        motion = load_motion(trial)
        look = Look(
            view=camera_named(view, motion),
            size=size or SHAPE,
            exaggeration=exaggerate,
            theme=theme_called(theme),
        )
        files = [trial / "movie.mp4"] if output is None else [Path(output)]
        if gif and files[0].suffix.lower() != ".gif":
            files.append(files[0].with_suffix(".gif"))
        notes: list[str] = []
        film = draw_film(
            motion,
            files,
            look,
            start=start,
            end=end,
            speed=speed,
            forces=plate_forces(trial, motion, notes),
            watch=None if watch is None else _watching(watch, trial.name),
        )
        made.append(Movie(film.files, film.pictures, film.seconds, notes))
    return made


def _watching(watch: Callable[[str, float], None], name: str) -> Callable[[float], None]:
    return lambda share: watch(name, share)
