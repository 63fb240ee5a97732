"""The command line: parse, call, print. Exit status 0 done, 1 needs a look, 2 input wrong, 130 stopped.

Everything heavy is imported inside the command that needs it, so that help appears at once.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Annotated, Any

import typer

from condyle.model.errors import CondyleError

DONE, NEEDS_A_LOOK, WRONG_INPUT, OUR_FAULT, STOPPED = 0, 1, 2, 70, 130

app = typer.Typer(
    name="condyle",
    help=(
        "Size a skeleton to one person, pose it in every frame of a marker recording, and see how "
        "well it fits. A measuring aid, not a diagnosis."
    ),
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)

Json = Annotated[bool, typer.Option("--json", help="Print the answer as JSON.")]
Labels = Annotated[
    Path | None,
    typer.Option("--labels", help="MAP.yaml: one 'model marker: label in the recording' a line."),
]
Up = Annotated[
    str | None,
    typer.Option("--up", help="The laboratory axis that points up: X, Y, Z, -X, -Y or -Z."),
]
Units = Annotated[
    str | None,
    typer.Option("--units", help="The recordings' unit of length, mm or m; wins over the files'."),
]
From = Annotated[float | None, typer.Option("--from", help="Seconds, on the recording's clock.")]
To = Annotated[float | None, typer.Option("--to", help="Seconds, on the recording's clock.")]

View = Annotated[
    str, typer.Option("--view", help="front, side, top, oblique, or a camera's YAML file.")
]
Size = Annotated[str | None, typer.Option("--size", help="Pixels, such as 1280x960.")]
Exaggerate = Annotated[
    float, typer.Option("--exaggerate", help="How many times longer residuals are drawn.")
]
Theme = Annotated[str, typer.Option("--theme", help="light or dark.")]


def pixels(size: str | None) -> tuple[int, int] | None:
    """A size written as WIDTHxHEIGHT."""
    if size is None:
        return None
    width, _, height = size.lower().partition("x")
    if not (width.isdecimal() and height.isdecimal()):
        raise CondyleError(f"--size {size}: this is no size.\n  Write it as 1280x960, in pixels.")
    return int(width), int(height)


def guarded(command: Callable[..., int | None]) -> Callable[..., None]:
    """Turn what a command returns or raises into an exit status and one honest line."""

    @wraps(command)
    def run(*args: Any, **kwargs: Any) -> None:
        try:
            status = command(*args, **kwargs) or DONE
        except CondyleError as fault:
            print(fault, file=sys.stderr)
            status = WRONG_INPUT
        except KeyboardInterrupt:
            print("stopped; what was finished is kept.", file=sys.stderr)
            status = STOPPED
        except BrokenPipeError:
            sys.stderr.close()
            status = DONE
        except typer.Exit:
            raise
        except Exception as fault:  # noqa: BLE001 - a defect of ours becomes one honest line
            from condyle.faults import log_fault

            print(log_fault(fault), file=sys.stderr)
            status = OUR_FAULT
        raise typer.Exit(status)

    return run


@app.command(epilog="Example: condyle demo demo_out")
@guarded
def demo(
    directory: Annotated[Path, typer.Argument(help="Where to write the study.")],
    json: Json = False,
) -> int:
    """Write the demo study into DIRECTORY and run all of it: calibrate, solve, draw, compare."""
    from condyle.answers import show_demo
    from condyle.demonstration import demo as run

    return show_demo(lambda watch: run(directory, watch=watch), as_json=json)


@app.command(epilog="Example: condyle check lower_limbs")
@guarded
def check(
    model: Annotated[str, typer.Argument(help="A shipped model's name, or a file.")],
    recording: Annotated[
        Path | None,
        typer.Option("--recording", help="Judge only the markers that this file has."),
    ] = None,
    labels: Labels = None,
    picture: Annotated[
        Path | None,
        typer.Option("--picture", help="FILE.png: draw the model, its joint axes and markers."),
    ] = None,
    marker_list: Annotated[
        bool, typer.Option("--marker-list", help="Print a placement sheet of the markers instead.")
    ] = False,
    json: Json = False,
) -> int:
    """Read a MODEL: its tree, coordinates, markers and what they can tell, or every mistake."""
    from condyle.answers import show_model
    from condyle.checking import check as run

    report = run(
        model, recording=recording, labels=labels, picture=picture, marker_list=marker_list
    )
    return show_model(report, as_json=json)


@app.command(epilog="Example: condyle recording walk.c3d")
@guarded
def recording(
    file: Annotated[Path, typer.Argument(help="A C3D file, or a table in CSV or Parquet.")],
    units: Units = None,
    json: Json = False,
) -> int:
    """Tell what a recording FILE holds: rate, units, up axis, markers, gaps, plates, events."""
    from condyle.answers import show_recording
    from condyle.pipeline import describe_recording

    return show_recording(describe_recording(file, units=units), as_json=json)


@app.command(epilog="Example: condyle calibrate lower_limbs static.c3d --mass 67.6 -o subject.yaml")
@guarded
def calibrate(
    model: Annotated[str, typer.Argument(help="A shipped model's name, or a file.")],
    static: Annotated[Path, typer.Argument(help="The static trial: the person stands still.")],
    moving: Annotated[
        list[Path] | None,
        typer.Argument(help="Trials in which the same person moves: joint centres and axes."),
    ] = None,
    *,
    output: Annotated[Path, typer.Option("--output", "-o", help="The subject file to write.")],
    mass: Annotated[float | None, typer.Option("--mass", help="Of the person, kg.")] = None,
    stature: Annotated[float | None, typer.Option("--stature", help="Of the person, m.")] = None,
    lengths: Annotated[
        Path | None,
        typer.Option("--lengths", help="YAML of tape-measured lengths: {thigh_right: 0.43}."),
    ] = None,
    marker_diameter: Annotated[
        float | None,
        typer.Option("--marker-diameter", help="Of the markers, m; 0.014 if not said."),
    ] = None,
    body_table: Annotated[
        str | None,
        typer.Option(
            "--body-table",
            help="Masses by de_leva_female, de_leva_male, dumas_female or dumas_male.",
        ),
    ] = None,
    labels: Labels = None,
    units: Units = None,
    start: From = None,
    end: To = None,
    up: Up = None,
    json: Json = False,
) -> int:
    """Size a MODEL and place its markers on the person of a STATIC and MOVING trials; write SUBJECT.yaml."""
    from condyle.answers import show_subject
    from condyle.pipeline import calibrate as run

    made = run(
        model,
        static,
        output,
        moving=moving or (),
        mass=mass,
        stature=stature,
        lengths=lengths,
        marker_diameter=marker_diameter,
        body_table=body_table,
        labels=labels,
        units=units,
        up=up,
        start=start,
        end=end,
    )
    return show_subject(made, as_json=json)


@app.command(epilog="Example: condyle solve subject.yaml walk.c3d -o results")
@guarded
def solve(
    subject: Annotated[str, typer.Argument(help="A sized subject, or any model as it stands.")],
    trials: Annotated[list[Path], typer.Argument(help="Movement trials.")],
    output: Annotated[Path, typer.Option("--output", "-o", help="The folder for the results.")],
    labels: Labels = None,
    units: Units = None,
    start: From = None,
    end: To = None,
    up: Up = None,
    no_smooth: Annotated[
        bool,
        typer.Option("--no-smooth", help="Each frame by itself, without rates."),
    ] = False,
    covariance: Annotated[
        bool,
        typer.Option("--covariance", help="Write covariance.npz too: all numbers of each frame."),
    ] = False,
    loss: Annotated[
        str,
        typer.Option("--loss", help="squares; huber or geman_mcclure if some markers are wrong."),
    ] = "squares",
    json: Json = False,
) -> int:
    """Fit the joint coordinates of every frame of the TRIALS; write one folder of results each."""
    from condyle.answers import show_solved
    from condyle.pipeline import solve as run

    return show_solved(
        lambda watch: run(
            subject,
            trials,
            output,
            smooth=not no_smooth,
            covariance=covariance,
            loss=loss,
            labels=labels,
            units=units,
            up=up,
            start=start,
            end=end,
            watch=watch,
        ),
        as_json=json,
    )


@app.command(epilog="Example: condyle picture results/walk --time 1.2 --view side")
@guarded
def picture(
    directory: Annotated[Path, typer.Argument(help="What condyle solve wrote.")],
    frame: Annotated[
        int | None, typer.Option("--frame", help="Draw this frame, by the recording's own number.")
    ] = None,
    time: Annotated[
        float | None, typer.Option("--time", help="Draw the frame nearest this time, seconds.")
    ] = None,
    view: View = "oblique",
    size: Size = None,
    width_mm: Annotated[
        float | None, typer.Option("--width-mm", help="For print: the width; 85 is one column.")
    ] = None,
    dpi: Annotated[float, typer.Option("--dpi", help="For print: pixels per inch.")] = 300.0,
    exaggerate: Exaggerate = 3.0,
    theme: Theme = "light",
    transparent: Annotated[
        bool, typer.Option("--transparent", help="Without the ground, for a slide.")
    ] = False,
    ghost: Annotated[
        list[Path] | None,
        typer.Option("--ghost", help="Another solved trial, drawn pale beside it; repeatable."),
    ] = None,
    together: Annotated[
        bool, typer.Option("--together", help="Move ghosts onto the person's place and heading.")
    ] = False,
    axes: Annotated[bool, typer.Option("--axes", help="Draw the joint axes.")] = False,
    ellipsoids: Annotated[
        bool, typer.Option("--ellipsoids", help="Draw how well each place is known (95 %).")
    ] = False,
    subject: Annotated[
        Path | None,
        typer.Option("--subject", help="For axes and ellipsoids: the subject, if it has moved."),
    ] = None,
    output: Annotated[
        Path | None, typer.Option("--output", "-o", help="FILE.png (.jpg, .tif) of one picture.")
    ] = None,
    json: Json = False,
) -> int:
    """Draw the worst frame, the best, and the whole trial; or one frame, of each trial in DIRECTORY."""
    from condyle.answers import show_pictures
    from condyle.picturing import Beside
    from condyle.picturing import picture as run

    made = run(
        directory,
        frame=frame,
        time=time,
        view=view,
        size=pixels(size),
        width_mm=width_mm,
        dpi=dpi,
        exaggerate=exaggerate,
        theme=theme,
        transparent=transparent,
        beside=Beside(tuple(ghost or ()), together, axes, ellipsoids, subject),
        output=output,
    )
    return show_pictures(made, as_json=json)


@app.command(epilog="Example: condyle report results")
@guarded
def report(
    directory: Annotated[Path, typer.Argument(help="What condyle solve wrote.")],
    subject: Annotated[
        Path | None,
        typer.Option("--subject", help="The trials' subject, if it has moved: for its limits."),
    ] = None,
    json: Json = False,
) -> int:
    """Write a page for each solved trial in DIRECTORY, and an index of several: open it in a browser."""
    from condyle.page_answers import show_report
    from condyle.reporting import report as run
    from condyle.screen import progress

    with progress("writing") as watch:
        made = run(directory, subject=subject, watch=watch)
    return show_report(made, as_json=json)


@app.command(epilog="Example: condyle figures results/walk --kind pdf --kind svg")
@guarded
def figures(
    directory: Annotated[Path, typer.Argument(help="What condyle solve wrote.")],
    kind: Annotated[
        list[str] | None,
        typer.Option("--kind", help="png, svg or pdf; repeatable. By default png."),
    ] = None,
    subject: Annotated[
        Path | None,
        typer.Option("--subject", help="The trials' subject, if it has moved: for its limits."),
    ] = None,
    json: Json = False,
) -> int:
    """Draw figures for a paper: coordinates with 95 % bands, left over right, errors of the markers."""
    from condyle.page_answers import show_figures
    from condyle.reporting import figures as run
    from condyle.screen import progress

    with progress("drawing") as watch:
        made = run(directory, kinds=tuple(kind or ("png",)), subject=subject, watch=watch)
    return show_figures(made, as_json=json)


@app.command(epilog="Example: condyle movie results/walk --from 1 --to 3 --speed 0.25")
@guarded
def movie(
    directory: Annotated[Path, typer.Argument(help="What condyle solve wrote.")],
    start: From = None,
    end: To = None,
    speed: Annotated[
        float, typer.Option("--speed", help="1 is real time, 0.25 four times slower.")
    ] = 1.0,
    view: View = "oblique",
    size: Size = None,
    exaggerate: Exaggerate = 3.0,
    theme: Theme = "light",
    gif: Annotated[bool, typer.Option("--gif", help="Write a GIF too, half as large.")] = False,
    output: Annotated[
        Path | None, typer.Option("--output", "-o", help="FILE.mp4 or FILE.gif of one trial.")
    ] = None,
    json: Json = False,
) -> int:
    """Film the fitted skeleton with the markers measured, for each solved trial in DIRECTORY."""
    from condyle.answers import show_movies
    from condyle.filming import movie as run

    return show_movies(
        lambda watch: run(
            directory,
            start=start,
            end=end,
            speed=speed,
            view=view,
            size=pixels(size),
            exaggerate=exaggerate,
            theme=theme,
            gif=gif,
            output=output,
            watch=watch,
        ),
        as_json=json,
    )


@app.command(epilog="Example: condyle export subject.yaml --to subject.urdf")
@guarded
def export(
    source: Annotated[str, typer.Argument(help="A sized subject, or one solved trial's folder.")],
    to: Annotated[Path | None, typer.Option("--to", help="FILE.urdf: the skeleton.")] = None,
    motion: Annotated[
        Path | None, typer.Option("--motion", help="FILE.csv or .parquet: the trial's motion.")
    ] = None,
    sampled: Annotated[
        int | None,
        typer.Option("--sampled", help="Samples of each function that a URDF cannot say."),
    ] = None,
    subject: Annotated[
        str | None,
        typer.Option("--subject", help="With --motion: the trial's subject, where it has moved."),
    ] = None,
    up: Up = None,
    json: Json = False,
) -> int:
    """Write a subject as a URDF, or a solved trial as motion for it, for robotics tools."""
    from condyle.answers import show_exported
    from condyle.exporting import export as run

    made = run(source, to=to, motion=motion, sampled=sampled, subject=subject, up=up)
    return show_exported(made, as_json=json)


def main() -> None:
    """Run the command line."""
    app()
