"""A C source compiled once by the system's compiler, kept for the next time, loaded safely.

A library that is loaded runs with all rights of the user. So it is kept in a folder that nobody
else can write to, under a name that holds the SHA-256 of everything it was made from and of its own
bytes; what does not match its name is thrown away and made anew. It is written whole, then renamed:
two processes at once both end with a good one, and a compiler that dies or hangs leaves nothing.
"""

from __future__ import annotations

import ctypes
import hashlib
import os
import platform
import shlex
import shutil
import signal
import stat
import subprocess
import sys
import tempfile
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path
from time import time

COMPILE_SECONDS = 60.0
"""A compiler that takes longer hangs; the kernel takes less than one second."""
UNFINISHED = "building-"
"""How the folder of a compile that has not ended is called."""
STALE_SECONDS = 3600.0
"""Age at which what a killed process left behind is swept away."""
FLAGS = ("-O2", "-std=gnu11", "-shared", "-fPIC", "-fno-math-errno", "-ffp-contract=fast", "-w")
NATIVE = "-march=native"
"""Tried first; a compiler that does not know it still makes a good library."""


class KernelUnavailableError(Exception):
    """Nothing could be compiled or loaded here; the message says why, in a few words."""


@dataclass(frozen=True, slots=True)
class Kernel:
    """A library that is loaded, and what is worth saying about how it came.

    Attributes
    ----------
    library : ctypes.CDLL
    remark : str
        Empty where it came from the cache or went there.
    """

    library: ctypes.CDLL
    remark: str


def load_kernel(source: str, *, timeout: float = COMPILE_SECONDS) -> Kernel:
    """The library of a C source, from the cache or else compiled.

    Parameters
    ----------
    timeout : float
        s, for each run of the compiler.

    Raises
    ------
    KernelUnavailableError
        Where there is no compiler, or it fails, or nothing may be loaded.
    """
    compiler = find_compiler()
    key = _key(source, compiler)
    folder, why_not = _private(cache_folder())
    if folder is not None:
        try:
            return Kernel(_from_folder(folder, key, source, compiler, timeout), "")
        except OSError as fault:
            why_not = f"{folder} cannot be used ({fault.strerror or fault})"
    try:
        # Loaded libraries stay mapped when their file goes.
        with tempfile.TemporaryDirectory(prefix="condyle-") as once:
            library = _from_folder(Path(once), key, source, compiler, timeout)
    except OSError as fault:
        raise KernelUnavailableError(f"the compiled kernel cannot be loaded: {fault}") from fault
    return Kernel(library, f"{why_not}: the kernel is compiled anew each time")


def cache_folder() -> Path:
    """Where compiled kernels are kept: `condyle` in the user's cache folder."""
    chosen = os.environ.get("XDG_CACHE_HOME", "")
    if os.path.isabs(chosen):
        return Path(chosen) / "condyle"
    home = Path(os.path.expanduser("~"))
    return home / ("Library/Caches" if sys.platform == "darwin" else ".cache") / "condyle"


def find_compiler() -> tuple[str, ...]:
    """The command of the C compiler: CC where it is set, else what the system calls one.

    Raises
    ------
    KernelUnavailableError
        If there is none.
    """
    asked = shlex.split(os.environ.get("CC", ""))
    for command in [asked] if asked else [["cc"], ["gcc"], ["clang"]]:
        path = shutil.which(command[0])
        if path is not None:
            return (path, *command[1:])
    raise KernelUnavailableError(f"no C compiler was found ({' '.join(asked) or 'cc'})")


def _key(source: str, compiler: tuple[str, ...]) -> str:
    """SHA-256 of everything that the library depends on."""
    version = _run([*compiler, "--version"], 10.0)
    parts = (
        source,
        *FLAGS,
        NATIVE,
        *compiler,
        version,
        metadata.version("casadi"),
        sys.platform,
        _processor(),
    )
    return hashlib.sha256("\0".join(parts).encode()).hexdigest()


def _processor() -> str:
    """What the processor can do: a cache may be shared by machines."""
    try:
        lines = Path("/proc/cpuinfo").read_text(errors="replace").splitlines()
    except OSError:
        lines = []
    told = [line for line in lines if line.lower().startswith(("flags", "features"))]
    return f"{platform.machine()} {platform.processor()} {told[0] if told else ''}"


def _private(folder: Path) -> tuple[Path | None, str]:
    """The folder, made if need be, if only its owner, who runs this, can write there; or why not."""
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        folder.mkdir(mode=0o700, exist_ok=True)
        status = folder.lstat()
    except OSError as fault:
        return None, f"{folder} cannot be made ({fault.strerror or fault})"
    if not stat.S_ISDIR(status.st_mode):
        return None, f"{folder} is not a folder"
    if hasattr(os, "geteuid") and status.st_uid != os.geteuid():
        return None, f"{folder} belongs to someone else"
    if status.st_mode & (stat.S_IWGRP | stat.S_IWOTH):
        return None, f"others can write to {folder}"
    return folder, ""


def _from_folder(
    folder: Path, key: str, source: str, compiler: tuple[str, ...], timeout: float
) -> ctypes.CDLL:
    for path in sorted(folder.glob(f"{key}-*.so")):
        if path.stem == f"{key}-{_digest(path)}":
            with suppress(OSError):
                return ctypes.CDLL(str(path))
        path.unlink(missing_ok=True)
    path = _compiled(folder, key, source, compiler, timeout)
    try:
        return ctypes.CDLL(str(path))
    except OSError:
        path.unlink(missing_ok=True)
        raise


def _digest(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def _compiled(
    folder: Path, key: str, source: str, compiler: tuple[str, ...], timeout: float
) -> Path:
    """A new library in the folder, under the name that proves it."""
    _sweep(folder)
    with tempfile.TemporaryDirectory(prefix=UNFINISHED, dir=folder) as shop:
        made, text = Path(shop) / "kernel.so", Path(shop) / "kernel.c"
        text.write_text(source)
        try:
            _run([*compiler, NATIVE, *FLAGS, "-o", str(made), str(text), "-lm"], timeout)
        except _CompilerError:
            _run([*compiler, *FLAGS, "-o", str(made), str(text), "-lm"], timeout)
        if not made.is_file():
            raise KernelUnavailableError(f"{compiler[0]} made nothing")
        made.chmod(0o600)
        path = folder / f"{key}-{_digest(made)}.so"
        os.replace(made, path)
    return path


def _sweep(folder: Path) -> None:
    """Take away what processes that were killed while compiling left behind."""
    for left in folder.glob(f"{UNFINISHED}*"):
        try:
            if time() - left.lstat().st_mtime > STALE_SECONDS:
                shutil.rmtree(left, ignore_errors=True)
        except FileNotFoundError:
            continue


class _CompilerError(KernelUnavailableError):
    """The compiler ran and refused."""


def _run(command: Sequence[str], timeout: float) -> str:
    """What a command says; it and all that it started are ended when it takes too long."""
    name = Path(command[0]).name
    try:
        process = subprocess.Popen(
            command,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            errors="replace",
            start_new_session=True,
        )
    except OSError as fault:
        raise KernelUnavailableError(f"{name} cannot be run ({fault.strerror})") from fault
    with process:
        try:
            said, _ = process.communicate(timeout=timeout)
        except BaseException as fault:
            _end(process)
            if isinstance(fault, subprocess.TimeoutExpired):
                raise KernelUnavailableError(f"{name} took more than {timeout:g} s") from None
            raise
    if process.returncode:
        raise _CompilerError(f"{name} failed ({process.returncode}): {said.strip()[:200]}")
    return said


def _end(process: subprocess.Popen[str]) -> None:
    if hasattr(os, "killpg"):
        os.killpg(process.pid, signal.SIGKILL)
    else:
        process.kill()
