"""Damaged model files by the thousand: whatever the YAML, a skeleton or a report.

Each file is a sound one (the shipped models, the examples, one that uses every key) changed by
chance: bytes flipped; lines swapped, repeated or lost; values, anchors, tags, paths and deep nesting
put where they do not belong. What must hold of each:

- a skeleton, or a `ModelError` whose mistakes all have a file and a line: no other exception;
- within 10 seconds;
- memory does not grow: the process stays within ``MOST_GROWTH`` of what it took after reading the
  sound ones;
- nothing outside is touched: no file opened but those of the model's own folder and the shipped
  models, no process started, nothing connected or unpickled, no library loaded.

File number i of a seed is always the same one: ``--only i`` repeats it and shows it.

    python benchmarks/fuzz_models.py [--files 20000] [--seed 1] [--workers 2] [--only I] [--small]

`--small` leaves the large shipped models out, which take most of the time.
"""

from __future__ import annotations

import argparse
import os
import re
import resource
import signal
import sys
import tempfile
import time
import traceback
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, field
from itertools import repeat
from pathlib import Path

import numpy as np

from condyle.model import load_skeleton
from condyle.model.errors import ModelError
from condyle.model.skeleton import Skeleton

ROOT = Path(__file__).resolve().parents[1]
SHIPPED = ROOT / "models_yaml"
EXAMPLES = ROOT / "docs" / "examples"

LONGEST = 10
"""s for one file; a file of ten megabytes is the slowest that is read at all."""

MOST_GROWTH = 200_000_000
"""Bytes of resident memory beyond what reading the sound models took; a file of the most values
(100 000) makes a tree of about 60 MB, and its vocabulary check about as much again."""

EVERY_KEY = """\
condyle: 1
name: bench
about: every key of the language once
sources: [invented]
mirror: {_right: _left}
person: {stature: 1.75, mass: 70}
segments:
  thorax: {landmarks: {IJ: [0, 0, 0], AC_right: [0, 0, 0.2]}}
  scapula_right: {mass: 1, landmarks: {AI_right: [-0.02, -0.12, 0]}, length: [[0, 0, 0], AI_right]}
  pelvis:
    mass_share: 0.1
    centre_of_mass: [0, 0.05, 0]
    gyration: [0.1, 0.1, 0.1]
    landmarks: {ASIS_right: [0, 0, 0.1], PSIS_right: [-0.1, 0, 0.1]}
    shapes: [{mesh: bone.stl, at: [0, 0, 0], turned: {axis: z, angle: 9}, scale: 2}]
  thigh_right: {}
  bar: {}
joints:
  root:
    from: laboratory
    to: thorax
    floating: {position: [x, y, z], angles: {sequence: [y, x, z], names: [a, b, c]}}
  scapula_right:
    from: thorax
    to: scapula_right
    at: AC_right
    in_child: [0, 0, 0.01]
    spherical:
      angles: {sequence: [y, x, z], names: [d_right, e_right, f_right]}
      cone: 60
      twist: [-40, 40]
      rest_sd: 30
  back: {from: thorax, to: pelvis, at: [0, -0.4, 0], turned: {axis: x, angle: 3}, fixed: true}
  hip_right:
    from: pelvis
    to: thigh_right
    at: [0, 0, 0.09]
    placed: [0, 0, 0.09]
    placed_sd: [0.1, 0.1, 0.1]
    axis_turn: [1, 2, 3]
    axis_turn_sd: [1, 1, 1]
    moves:
      - {rotate: z, coordinate: hip_right, range: [-30, 120], rest: 5, rest_sd: 60}
      - {translate: [1, 2, 3], follows: hip_right, spline: [[0, 0], [30, 0.004], [60, 0.001]]}
      - {rotate: y, coordinate: turn_right, follows: hip_right, polynomial: [0, 1], between: [0, 9]}
  bar: {from: laboratory, to: bar, turned: upright, moves: [{rotate: z, coordinate: bar, held: 1}]}
coordinates: {hip_right: {range: [-30, 100]}}
markers:
  ASIS_right: {segment: pelvis, at: ASIS_right, placed_within: 0.01, sd: 0.01}
  thigh_right: {segment: thigh_right, placed: [0, 0, 0], placed_sd: [0.1, 0.1, 0.1]}
ties:
  grip_right: {point: [scapula_right, AI_right], meets: [bar, [0, 0, 0.25]], sd: 0.001}
  seat: {point: [thorax, IJ], on_plane: {of: laboratory, through: [0, 0, 0], normal: y}}
  glide_right:
    point: [scapula_right, AI_right]
    on_ellipsoid: {of: thorax, centre: IJ, radii: [0.1, 0.2, 0.1]}
  rod: {point: [bar, [0, 0, 0]], stays: {distance: 0.3, from: [thorax, IJ]}}
sizing:
  factor_sd: 0.08
  segments: {thigh_right: {along: [y], across: [x, z], with: thigh_left}}
  joints: {hip_right: {place_sd: 0.012, axis_sd: 4, centre_from: harrington_2007}}
  standing: {hip_right: [5, 5]}
sizes: {thigh_right: {factors: [1, 1.1, 1], sd: [0.1, 0.1, 0.1]}}
subject: {stature: 1.8, mass: 80}
labels: {ASIS_right: "12"}
up: +Z
calibration: {static: stand.c3d, seconds: [1, 2]}
"""

SMALLEST = """\
condyle: 1
extends: other.yaml
segments: {shank: {}}
joints:
  root:
    from: laboratory
    to: shank
    floating: {position: [x, y, z], angles: {sequence: [z, x, y], names: [lean, tilt, turn]}}
markers:
  knee: {segment: shank, at: [0, 0, 0.06]}
  ankle: {segment: shank, at: [0, -0.40, 0.05]}
"""

VALUES = [
    "null", "true", "3", "-1", "0", "1e400", ".nan", "-.inf", "99999999999999999999", "''", "x", "-z",
    "laboratory", "upright", "[]", "{}", "[1, 2, 3]", "[0, 0, 0]", "[[1, 2], [3]]", "{a: {b: {c: 1}}}",
    "[{rotate: [0, 0, 0]}, 3]", "[null, true]", "hip_right", "thigh_right", "pelvis", "{1: 2}", "'\\'",
    "2024-01-01", "0x10", "0o7", "1_000", "12:30:45", "[1, 2, [3]]", "{segment: {}}", "1e-320", "'[key]'",
    "harrington_2007", "[thorax, IJ]", "{<<: {a: 1}}", "=", "|", "? a", "lower_limbs",
]  # fmt: skip
TAGS = [
    "!!python/object/apply:os.system ['touch {canary}']", "!!python/object/new:subprocess.Popen [['true']]",
    "!!python/name:os.system", "!!python/module:antigravity", "!!binary aGVsbG8=", "!!set {a, b}", "!!omap [a: 1]",
    "!!timestamp 2001-12-14", "!!float 1", "!!str 1", "!local {a: 1}", "!<tag:yaml.org,2002:int> 3", "!!map {}",
]  # fmt: skip
PATHS = [
    "/etc/passwd", "../../../../etc/passwd", "/proc/self/mem", "/dev/zero", "/dev/stdin", "file:///etc/passwd",
    "~/.bashrc", ".", "..", "/", "model.yaml", "other.yaml", "./other.yaml", "lower_limbs", "a" * 300,
    "outside.yaml", "'a\\0b'", "%2e%2e/outside.yaml",
]  # fmt: skip
ANCHORS = ["&a [*a]", "&a {b: *a}", "*a", "&a 3", "&a [*b, *b]", "&b &b x", "<<: *a"]
WATCHED = (
    "os.system", "os.exec", "os.posix_spawn", "os.fork", "os.startfile", "subprocess.Popen", "socket.connect",
    "socket.bind", "pickle.find_class", "ctypes.dlopen", "urllib.Request", "os.remove", "os.rename", "os.mkdir",
    "shutil.copyfile",
)  # fmt: skip

Change = Callable[[str, np.random.Generator], str]


def corpus(*, small: bool = False) -> list[str]:
    """The sound files that are damaged."""
    own = [EVERY_KEY, EVERY_KEY, SMALLEST]
    if small:
        return [*own, SMALLEST]
    paths = [*sorted(SHIPPED.glob("*.yaml")), *sorted(EXAMPLES.glob("*.yaml"))]
    return [*(path.read_text(encoding="utf-8") for path in paths), *own]


def _flip_bytes(text: str, random: np.random.Generator) -> str:
    content = bytearray(text.encode("utf-8", "surrogateescape"))
    for _ in range(int(random.integers(1, 9))):
        content[int(random.integers(len(content)))] ^= 1 << int(random.integers(8))
    return content.decode("utf-8", "surrogateescape")


def _move_lines(text: str, random: np.random.Generator) -> str:
    lines = text.splitlines()
    at, other = (int(i) for i in random.integers(len(lines), size=2))
    match int(random.integers(5)):
        case 0:
            lines[at], lines[other] = lines[other], lines[at]
        case 1:
            del lines[at]
        case 2:
            lines.insert(at, lines[other])
        case 3:
            lines[at] = " " * int(random.integers(9)) + lines[at].strip()
        case _:
            lines = lines[: at + 1]
    return "\n".join(lines) + "\n"


def _change_value(text: str, random: np.random.Generator) -> str:
    return _put(text, str(random.choice(VALUES)), random)


def _swap_values(text: str, random: np.random.Generator) -> str:
    words = list(re.finditer(r"[\w.+-]+", text))
    first, second = sorted((words[int(i)] for i in random.integers(len(words), size=2)), key=_start)
    if first.end() > second.start():
        return text
    between = text[first.end() : second.start()]
    return text[: first.start()] + second[0] + between + first[0] + text[second.end() :]


def _start(match: re.Match[str]) -> int:
    return match.start()


def _put_character(text: str, random: np.random.Generator) -> str:
    at = int(random.integers(len(text) + 1))
    return text[:at] + str(random.choice(list("{}[]:,-#&*!'\"|>%@`?\tx9 \0é\u2028"))) + text[at:]


def _put_anchor(text: str, random: np.random.Generator) -> str:
    return _put(
        _put(text, str(random.choice(ANCHORS)), random), str(random.choice(ANCHORS)), random
    )


def _put_tag(text: str, random: np.random.Generator) -> str:
    return _put(text, str(random.choice(TAGS)).replace("{canary}", "canary"), random)


def _put_path(text: str, random: np.random.Generator) -> str:
    path = str(random.choice(PATHS))
    match int(random.integers(3)):
        case 0:
            return text.replace("condyle: 1\n", f"condyle: 1\nextends: {path}\n", 1)
        case 1:
            return re.sub(r"(?<=mesh: )[^,}\n]+", lambda _: path, text)
        case _:
            return _put(text, path, random)


def _nest(text: str, random: np.random.Generator) -> str:
    depth = int(random.choice([5, 41, 500, 5000]))
    opening, closing = [("[", "]"), ("{a: ", "}"), ("[", ""), ("- ", "")][int(random.integers(4))]
    return _put(text, opening * depth + "1" + closing * depth, random)


def _explode(text: str, random: np.random.Generator) -> str:
    """Anchors that double, or multiply, with each line."""
    times = int(random.integers(2, 11))
    lines = ["calibration:", f"  a0: &a0 [{', '.join('x' * times)}]"]
    for number in range(1, int(random.integers(2, 30))):
        again = ", ".join([f"*a{number - 1}"] * times)
        lines.append(f"  a{number}: &a{number} [{again}]")
    return text.replace("condyle: 1\n", "condyle: 1\n" + "\n".join(lines) + "\n", 1)


def _repeat(text: str, random: np.random.Generator) -> str:
    """One line many times over, each under its own key."""
    lines = text.splitlines()
    at = int(random.integers(len(lines)))
    key, colon, rest = lines[at].partition(":")
    many = [f"{key}{number}{colon}{rest}" for number in range(int(random.choice([20, 500])))]
    return "\n".join([*lines[:at], *many, *lines[at:]]) + "\n"


def _put(text: str, value: str, random: np.random.Generator) -> str:
    """Replace the value of one line, or one word of the file, or a list's item."""
    if random.integers(2):
        words = list(re.finditer(r"(?<=: )[^,\n{}\[\]]+|(?<=[\[ ])-?[\d.]+(?=[,\]])", text))
        if words:
            word = words[int(random.integers(len(words)))]
            return text[: word.start()] + value + text[word.end() :]
    lines = text.splitlines()
    at = int(random.integers(len(lines)))
    lines[at] = f"{lines[at].split(':')[0]}: {value}"
    return "\n".join(lines) + "\n"


CHANGES: list[tuple[Change, float]] = [
    (_flip_bytes, 0.15), (_move_lines, 0.17), (_change_value, 0.22), (_swap_values, 0.13),
    (_put_character, 0.12), (_put_anchor, 0.05), (_put_tag, 0.05), (_put_path, 0.05),
    (_nest, 0.02), (_explode, 0.02), (_repeat, 0.02),
]  # fmt: skip


def damaged(number: int, seed: int, sound: Sequence[str]) -> bytes:
    """File `number` of a seed."""
    random = np.random.default_rng([seed, number])
    text = sound[int(random.integers(len(sound)))]
    chances = np.array([chance for _, chance in CHANGES])
    for _ in range(int(random.integers(1, 4))):
        change, _ = CHANGES[int(random.choice(len(CHANGES), p=chances / chances.sum()))]
        text = change(text, random) or "\n"
    return text.encode("utf-8", "surrogateescape")


@dataclass
class Tally:
    """What became of the files.

    Attributes
    ----------
    skeletons, reports, mistakes : int
    faults : (file number, what happened) pairs
    slowest : (seconds, file number)
    growth : int
        Bytes of resident memory beyond that after reading the sound files.
    """

    skeletons: int = 0
    reports: int = 0
    mistakes: int = 0
    faults: list[tuple[int, str]] = field(default_factory=list)
    slowest: tuple[float, int] = (0.0, -1)
    growth: int = 0

    def add(self, other: Tally) -> None:
        """Count another's files in."""
        self.skeletons += other.skeletons
        self.reports += other.reports
        self.mistakes += other.mistakes
        self.faults += other.faults
        self.slowest = max(self.slowest, other.slowest)
        self.growth = max(self.growth, other.growth)


class _Watch:
    """Hears of everything the interpreter opens or starts, while it listens.

    An audit hook cannot be taken away again, so there is one a process.
    """

    def __init__(self) -> None:
        self.folder: str | None = None
        self.heard: list[str] = []
        sys.addaudithook(self._hear)

    def _hear(self, event: str, arguments: tuple[object, ...]) -> None:
        if self.folder is None:
            return
        if event in WATCHED:
            self.heard.append(f"{event}{arguments[:1]}")
        elif event == "open" and not self._may_open(arguments):
            self.heard.append(f"open{arguments[:2]}")

    def _may_open(self, arguments: tuple[object, ...]) -> bool:
        name, mode = arguments[0], arguments[1]
        if not isinstance(name, str | bytes | os.PathLike):
            return False
        text = os.fsdecode(name)
        if text.endswith((".py", ".pyc")):  # the interpreter's own, at a first import
            return True
        path = os.path.realpath(text)
        inside = path.startswith((f"{self.folder}{os.sep}", f"{SHIPPED}{os.sep}"))
        return inside and (mode is None or not set(str(mode)) & set("wax+"))


_watch: _Watch | None = None


@contextmanager
def listening(folder: Path) -> Iterator[list[str]]:
    """Everything touched outside `folder` and the shipped models, in a list."""
    global _watch
    _watch = _watch or _Watch()
    _watch.folder, _watch.heard = os.path.realpath(folder), []
    try:
        yield _watch.heard
    finally:
        _watch.folder = None


class _TooLongError(Exception):
    pass


def _ring(*_: object) -> None:
    raise _TooLongError


def judge(content: bytes, folder: Path) -> tuple[int, str | None]:
    """Read one file: how many mistakes it has, and what of the promises was broken."""
    path = folder / "model.yaml"
    path.write_bytes(content)
    signal.signal(signal.SIGALRM, _ring)
    with listening(folder) as heard:
        signal.alarm(LONGEST)
        try:
            read: object = load_skeleton(path)
            mistakes = 0
        except ModelError as error:
            read, mistakes = None, len(error.mistakes)
            if not mistakes or any(
                m.line < 1 or not m.file or not m.remedy for m in error.mistakes
            ):
                return mistakes, f"a report without a place: {error.mistakes[:2]}"
        except _TooLongError:
            return 0, f"more than {LONGEST} s"
        except KeyboardInterrupt:
            raise
        except BaseException:  # noqa: BLE001  (whatever it is, it is the fault we look for)
            return 0, traceback.format_exc(limit=-3)
        finally:
            signal.alarm(0)
    if heard:
        return mistakes, f"touched {heard[:3]}"
    if read is not None and type(read) is not Skeleton:
        return mistakes, f"made a {type(read)}"
    if (folder / "canary").exists() or Path("canary").exists():
        return mistakes, "ran a command"
    return mistakes, None


def run(first: int, files: int, seed: int, sound: Sequence[str]) -> Tally:
    """Damage and judge files `first` to `first + files` of a seed."""
    tally = Tally()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name) / "models"
        folder.mkdir()
        (Path(name) / "outside.yaml").write_text("condyle: 1\nsegments: {}\n")
        (folder / "other.yaml").write_text("condyle: 1\nabout: a base\n")
        (folder / "outside.yaml").symlink_to(Path(name) / "outside.yaml")
        (folder / "bone.stl").write_text("solid bone\nendsolid bone\n")
        for text in sound:
            judge(text.encode(), folder)
        before = _resident()
        for number in range(first, first + files):
            content = damaged(number, seed, sound)
            began = time.perf_counter()
            mistakes, fault = judge(content, folder)
            tally.slowest = max(tally.slowest, (time.perf_counter() - began, number))
            tally.skeletons += not mistakes and fault is None
            tally.reports += mistakes > 0
            tally.mistakes += mistakes
            if fault is not None:
                tally.faults.append((number, fault))
        tally.growth = _resident() - before
    return tally


def _resident() -> int:
    """The most memory that this process has held, bytes (kilobytes on Linux)."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024


def main() -> int:
    arguments = argparse.ArgumentParser(description="Read damaged model files and count.")
    arguments.add_argument("--files", type=int, default=20_000)
    arguments.add_argument("--seed", type=int, default=1)
    arguments.add_argument("--workers", type=int, default=os.cpu_count() or 1)
    arguments.add_argument("--only", type=int)
    arguments.add_argument("--small", action="store_true")
    options = arguments.parse_args()
    sound = corpus(small=options.small)
    if options.only is not None:
        sys.stdout.buffer.write(damaged(options.only, options.seed, sound))
        print(run(options.only, 1, options.seed, sound), file=sys.stderr)
        return 0
    began = time.perf_counter()
    share = -(-options.files // options.workers)
    starts = range(0, options.files, share)
    sizes = [min(share, options.files - start) for start in starts]
    total = Tally()
    with ProcessPoolExecutor(options.workers) as pool:
        for tally in pool.map(run, starts, sizes, repeat(options.seed), repeat(sound)):
            total.add(tally)
    print(
        f"{options.files} damaged files in {time.perf_counter() - began:.0f} s: "
        f"{total.skeletons} still sound, {total.reports} reports with {total.mistakes} mistakes, "
        f"{len(total.faults)} faults; slowest {total.slowest[0]:.2f} s (file {total.slowest[1]}), "
        f"memory +{total.growth / 1e6:.0f} MB of {MOST_GROWTH / 1e6:.0f}"
    )
    kinds = Counter(fault.strip().splitlines()[-1] for _, fault in total.faults)
    for kind, count in kinds.most_common(20):
        number = next(n for n, fault in total.faults if fault.strip().endswith(kind))
        print(f"  {count} x {kind}  (--only {number})")
    return int(bool(total.faults) or total.growth > MOST_GROWTH)


if __name__ == "__main__":
    sys.exit(main())
