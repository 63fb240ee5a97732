"""Compiling, keeping and loading a small library where everything that can go wrong does."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from condyle.solver import kernel_cache
from condyle.solver.kernel_cache import (
    STALE_SECONDS,
    UNFINISHED,
    KernelUnavailableError,
    cache_folder,
    load_kernel,
)

ANSWER = "int answer(void) { return 42; }\n"
REAL_COMPILER = shutil.which("cc") or shutil.which("gcc") or shutil.which("clang")

pytestmark = [
    pytest.mark.skipif(REAL_COMPILER is None, reason="no C compiler here"),
    pytest.mark.skipif(os.name != "posix", reason="pretended compilers are shell scripts"),
]


@pytest.fixture(autouse=True)
def cache(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The cache folder, in a home of its own; no compiler is asked for by name."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    monkeypatch.delenv("CC", raising=False)
    return tmp_path / "cache" / "condyle"


@pytest.fixture
def temporary(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Where temporary folders go."""
    folder = tmp_path / "temporary"
    folder.mkdir()
    monkeypatch.setattr("tempfile.tempdir", str(folder))
    return folder


@pytest.fixture
def pretended(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[[str], Path]:
    """A compiler that runs a piece of shell script wherever it is to compile; the file it may write to."""

    def pretend(script: str) -> Path:
        notes = tmp_path / "notes"
        compiler = tmp_path / "pretended-cc"
        compiler.write_text(
            f'#!/bin/sh\nreal={REAL_COMPILER}\nnotes="{notes}"\n'
            'case "$*" in *--version*) echo pretended 1.0; exit 0;; esac\n'
            'previous=; for word in "$@"; do [ "$previous" = -o ] && out="$word"; previous="$word"; done\n'
            f"{script}\n"
        )
        compiler.chmod(0o755)
        monkeypatch.setenv("CC", str(compiler))
        return notes

    return pretend


def answer_of(kernel: kernel_cache.Kernel) -> int:
    return int(kernel.library.answer())


def libraries(folder: Path) -> list[Path]:
    return sorted(folder.glob("*.so"))


def test_a_source_is_compiled_once_and_then_found(
    cache: Path, pretended: Callable[[str], Path]
) -> None:
    notes = pretended('echo compiled >> "$notes"; exec "$real" "$@"')
    for _ in range(3):
        kernel = load_kernel(ANSWER)
        assert answer_of(kernel) == 42
        assert kernel.remark == ""
    assert notes.read_text() == "compiled\n"
    assert len(libraries(cache)) == 1


def test_the_cache_is_private_and_holds_nothing_but_libraries(cache: Path) -> None:
    load_kernel(ANSWER)
    assert cache_folder() == cache
    assert cache.stat().st_mode & 0o777 == 0o700
    assert [path.suffix for path in cache.iterdir()] == [".so"]
    assert libraries(cache)[0].stat().st_mode & 0o077 == 0


def test_whatever_the_library_depends_on_makes_another(
    cache: Path, monkeypatch: pytest.MonkeyPatch, pretended: Callable[[str], Path]
) -> None:
    load_kernel(ANSWER)
    load_kernel(ANSWER.replace("42", "43"))
    with monkeypatch.context() as patch:
        patch.setattr(kernel_cache, "FLAGS", (*kernel_cache.FLAGS, "-DOTHER"))
        load_kernel(ANSWER)
    with monkeypatch.context() as patch:
        patch.setattr(kernel_cache, "_processor", lambda: "another processor")
        load_kernel(ANSWER)
    with monkeypatch.context() as patch:
        patch.setattr(kernel_cache.metadata, "version", lambda _package: "0.0")
        load_kernel(ANSWER)
    pretended('exec "$real" "$@"')
    load_kernel(ANSWER)
    assert len({path.name[:64] for path in libraries(cache)}) == 6


def test_without_a_compiler_the_reason_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("PATH", "")
    with pytest.raises(KernelUnavailableError, match="no C compiler was found"):
        load_kernel(ANSWER)


def test_a_compiler_that_is_asked_for_but_is_not_there_is_named(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("CC", "no-such-compiler -x c")
    with pytest.raises(KernelUnavailableError, match="no-such-compiler"):
        load_kernel(ANSWER)


def test_a_source_that_does_not_compile_leaves_nothing(cache: Path) -> None:
    with pytest.raises(KernelUnavailableError, match="failed"):
        load_kernel("this is not C")
    assert not list(cache.iterdir())


def test_a_compiler_that_does_not_know_the_processor_still_serves(
    pretended: Callable[[str], Path],
) -> None:
    pretended('case "$*" in *-march=native*) exit 1;; esac; exec "$real" "$@"')
    assert answer_of(load_kernel(ANSWER)) == 42


@pytest.mark.parametrize("harm", ["poisoned", "truncated", "empty", "another library"])
def test_a_harmed_library_is_thrown_away_and_made_anew(cache: Path, harm: str) -> None:
    load_kernel(ANSWER.replace("42", "13"))
    other = libraries(cache)[0].read_bytes()
    libraries(cache)[0].unlink()
    # In another process: a library that is in use must not change under it.
    code = (
        "from condyle.solver.kernel_cache import load_kernel; import sys; load_kernel(sys.argv[1])"
    )
    subprocess.run([sys.executable, "-c", code, ANSWER], check=True)
    (path,) = libraries(cache)
    whole = path.read_bytes()
    path.write_bytes(
        {
            "poisoned": whole[:-1] + bytes([whole[-1] ^ 1]),
            "truncated": whole[: len(whole) // 2],
            "empty": b"",
            "another library": other,
        }[harm]
    )
    assert answer_of(load_kernel(ANSWER)) == 42
    (path,) = libraries(cache)
    assert path.stem.endswith(kernel_cache._digest(path))


@pytest.mark.parametrize("mode", [0o770, 0o707, 0o777, 0o1777])
def test_a_folder_that_others_can_write_to_is_not_used(
    cache: Path, temporary: Path, mode: int
) -> None:
    load_kernel(ANSWER)
    before = [(path.name, path.stat().st_mtime_ns) for path in cache.iterdir()]
    cache.chmod(mode)
    kernel = load_kernel(ANSWER)
    assert answer_of(kernel) == 42
    assert "others can write" in kernel.remark
    assert str(temporary) in kernel.library._name
    assert [(path.name, path.stat().st_mtime_ns) for path in cache.iterdir()] == before
    assert not list(temporary.iterdir())


def test_a_folder_that_belongs_to_someone_else_is_not_used(
    cache: Path, temporary: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    owner = os.geteuid()
    monkeypatch.setattr(os, "geteuid", lambda: owner + 1)
    kernel = load_kernel(ANSWER)
    assert answer_of(kernel) == 42
    assert "belongs to someone else" in kernel.remark
    assert not libraries(cache)
    assert not list(temporary.iterdir())


def test_a_link_in_place_of_the_folder_is_not_followed(
    cache: Path, temporary: Path, tmp_path: Path
) -> None:
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir(mode=0o700)
    cache.parent.mkdir()
    cache.symlink_to(elsewhere)
    assert "is not a folder" in load_kernel(ANSWER).remark
    assert not list(elsewhere.iterdir())


def test_where_nothing_can_be_kept_the_kernel_is_still_compiled(
    temporary: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file" / "cache"))
    kernel = load_kernel(ANSWER)
    assert answer_of(kernel) == 42
    assert "cannot be made" in kernel.remark
    assert "compiled anew each time" in kernel.remark
    assert not list(temporary.iterdir())


def test_where_nothing_can_be_written_at_all_the_reason_is_said(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file" / "cache"))
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path / "file"))
    with pytest.raises(KernelUnavailableError, match="cannot be loaded"):
        load_kernel(ANSWER)


@pytest.mark.parametrize("how", ["kill -9 $$", "kill -15 $$", "exit 1"])
def test_a_compiler_that_dies_half_way_leaves_nothing(
    cache: Path, pretended: Callable[[str], Path], how: str
) -> None:
    pretended(f'echo half > "$out"; {how}')
    with pytest.raises(KernelUnavailableError, match="failed"):
        load_kernel(ANSWER)
    assert not list(cache.iterdir())
    pretended('exec "$real" "$@"')
    assert answer_of(load_kernel(ANSWER)) == 42


def test_a_compiler_that_makes_rubbish_or_nothing_is_not_believed(
    cache: Path, temporary: Path, pretended: Callable[[str], Path]
) -> None:
    pretended('echo rubbish > "$out"')
    with pytest.raises(KernelUnavailableError, match="cannot be loaded"):
        load_kernel(ANSWER)
    pretended("exit 0")
    with pytest.raises(KernelUnavailableError, match="made nothing"):
        load_kernel(ANSWER)
    assert not list(cache.iterdir())
    assert not list(temporary.iterdir())


def test_a_compiler_that_hangs_is_ended_with_all_it_started(
    cache: Path, pretended: Callable[[str], Path]
) -> None:
    notes = pretended('echo half > "$out"; sleep 600 & echo $! > "$notes"; wait')
    began = time.monotonic()
    with pytest.raises(KernelUnavailableError, match=r"took more than 0\.5 s"):
        load_kernel(ANSWER, timeout=0.5)
    assert time.monotonic() - began < 20
    assert not list(cache.iterdir())
    assert has_ended(int(notes.read_text()))


def has_ended(process: int) -> bool:
    """Whether a process is gone, or waits only for its parent to notice."""
    for _ in range(100):
        try:
            os.kill(process, 0)
            state = Path(f"/proc/{process}/stat").read_text().rsplit(")", 1)[1].split()[0]
        except (ProcessLookupError, FileNotFoundError):
            return True
        if state == "Z":
            return True
        time.sleep(0.05)
    return False


def test_what_a_killed_process_left_is_swept_away_but_not_what_another_is_at(cache: Path) -> None:
    for name in ("old", "new"):
        (cache / f"{UNFINISHED}{name}").mkdir(parents=True)
        (cache / f"{UNFINISHED}{name}" / "kernel.so").write_text("half")
    cache.chmod(0o700)
    past = time.time() - 2 * STALE_SECONDS
    os.utime(cache / f"{UNFINISHED}old", (past, past))
    load_kernel(ANSWER)
    assert [path.name for path in cache.glob(f"{UNFINISHED}*")] == [f"{UNFINISHED}new"]


def test_processes_that_compile_at_once_all_end_with_a_good_library(
    cache: Path, pretended: Callable[[str], Path]
) -> None:
    notes = pretended('echo compiled >> "$notes"; sleep 0.5; exec "$real" "$@"')
    code = (
        "import sys; from condyle.solver.kernel_cache import load_kernel\n"
        "kernel = load_kernel(sys.argv[1]); print(kernel.library.answer(), kernel.remark)"
    )
    running = [
        subprocess.Popen([sys.executable, "-c", code, ANSWER], stdout=subprocess.PIPE, text=True)
        for _ in range(3)
    ]
    assert [process.communicate(timeout=60)[0].split() for process in running] == [["42"]] * 3
    assert len(notes.read_text().splitlines()) >= 2
    assert not list(cache.glob(f"{UNFINISHED}*"))
    assert answer_of(load_kernel(ANSWER)) == 42


SOLVE = """
import numpy as np
from condyle.model import load_skeleton
from condyle.solver.backends import backend
from condyle.solver.frame_problem import SkeletonFunctions
functions = SkeletonFunctions(load_skeleton("planar_linkage"))
used = backend()
print(used.name, type(functions.normal_equations._evaluate).__name__)
print(used.remark)
"""


def told(environment: dict[str, str]) -> list[str]:
    done = subprocess.run(
        [sys.executable, "-c", SOLVE],
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        timeout=120,
        check=True,
    )
    assert done.stderr == ""
    return done.stdout.splitlines()


def test_a_model_is_solved_in_numpy_where_there_is_no_compiler_and_one_line_says_why() -> None:
    first, remark = told({"PATH": ""})
    assert first == "replay ReplayOrMachine"
    assert remark == "solving in numpy, which is slower, because no C compiler was found (cc)"


def test_a_model_is_solved_compiled_where_there_is_a_compiler(cache: Path) -> None:
    first, *rest = told({"CONDYLE_BACKEND": ""})
    assert first == "compiled Compiled"
    assert not any(rest)
    assert len(libraries(cache)) == 1


def test_the_kernel_compiles_without_vector_types_too() -> None:
    plain = kernel_cache.load_kernel("#define CONDYLE_SCALAR\n" + whole_source())
    assert plain.library.over_frames
    assert plain.remark == ""


def whole_source() -> str:
    from condyle.solver.kernel_source import kernel_source

    return kernel_source()
