"""Makes the lock files of this folder anew: ``.venv/bin/python docker/lock.py`` (needs the ``dev`` extra).

- ``constraints.txt``: one exact version of everything, tests and tools included, for every Python and platform.
- ``requirements.lock``: what the image runs, from those versions, with hashes.
- ``build.lock``: what builds the wheel, likewise.

None of them holds an address, so that any index, mirror or folder of wheels will do. ``--upgrade`` takes the
newest versions; without it those in the files are kept where they still fit.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import tomllib
from pathlib import Path

HERE = Path(__file__).resolve().parent
PROJECT = HERE.parent / "pyproject.toml"
CONSTRAINTS = HERE / "constraints.txt"

# One version for all: another version of the numerics is another answer in its last digit.
SAME_EVERYWHERE = ("--universal", "--python-version", "3.11", "--fork-strategy", "fewest")
PLAIN = ("--quiet", "--no-annotate", "--no-header")


def resolve(source: Path, target: Path, *options: str) -> None:
    """Writes what ``source`` needs; ``--output-file`` also gives the versions that are preferred."""
    subprocess.run(
        [
            sys.executable,
            "-m",
            "uv",
            "pip",
            "compile",
            str(source),
            "--output-file",
            str(target),
            *SAME_EVERYWHERE,
            *PLAIN,
            *options,
        ],
        check=True,
        cwd=HERE.parent,
    )


def main() -> None:
    upgrade = sys.argv[1:]
    if upgrade not in ([], ["--upgrade"]):
        sys.exit(__doc__)
    resolve(PROJECT, CONSTRAINTS, "--all-extras", *upgrade)
    locked = ("--generate-hashes", "--constraint", str(CONSTRAINTS))
    resolve(PROJECT, HERE / "requirements.lock", *locked)
    with tempfile.TemporaryDirectory() as folder:
        backend = Path(folder) / "build.in"
        backend.write_text("\n".join(tomllib.loads(PROJECT.read_text())["build-system"]["requires"]))
        resolve(backend, HERE / "build.lock", *locked)


if __name__ == "__main__":
    main()
