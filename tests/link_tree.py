"""Lay the package out under build/typing the way a type checker expects to find it."""

import shutil
import tomllib
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
TREE = ROOT / "build" / "typing"


def main() -> None:
    config = tomllib.loads((ROOT / "pyproject.toml").read_text())
    shutil.rmtree(TREE, ignore_errors=True)
    for package, folder in config["tool"]["setuptools"]["package-dir"].items():
        target = TREE.joinpath(*package.split("."))
        target.mkdir(parents=True)
        for entry in (ROOT / folder).iterdir():
            (target / entry.name).symlink_to(entry)


if __name__ == "__main__":
    main()
