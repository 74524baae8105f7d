"""The project's few steps, for make and for people without make.

python3 steps.py demo       install what the tool needs, run the built-in campaign
python3 steps.py test       install the test tools too, check style, types and tests
python3 steps.py test-long  the tests that take minutes to hours
python3 steps.py bench      measure speed ratios, write the dated tables of bench/
python3 steps.py clean      remove what these steps made

Everything is installed into .venv of this folder, pinned with hashes; nothing else of the
machine is touched.
"""

from __future__ import annotations

import hashlib
import os
import shutil
import subprocess
import sys
import venv
from collections.abc import Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parent
VENV = ROOT / ".venv"
BIN = VENV / ("Scripts" if os.name == "nt" else "bin")
PYTHON = BIN / ("python.exe" if os.name == "nt" else "python")
OLDEST = (3, 11)
ROOMS = ("rig", "fit", "reports")


def run(*words: str | Path, check: bool = True, quiet: bool = False) -> int:
    """Run a command in the project's folder; stop with its exit code when it fails.

    A quiet one keeps the build tools' advice to package authors off the screen.
    """
    command = [str(word) for word in words]
    print("+ " + " ".join(command), flush=True)
    settings = {**environment(), **({"PYTHONWARNINGS": "ignore"} if quiet else {})}
    code = subprocess.run(command, cwd=ROOT, env=settings).returncode
    if check and code:
        sys.exit(code)
    return code


def environment() -> dict[str, str]:
    """Return the environment of every step: one thread per process, no stray settings."""
    single = dict.fromkeys(("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"), "1")
    cache = {"MPLCONFIGDIR": str(VENV / "matplotlib")}
    return {**os.environ, **single, **cache}


def make_venv() -> None:
    """Create .venv, or say which system package is missing."""
    if sys.version_info < OLDEST:
        sys.exit(
            f"python {OLDEST[0]}.{OLDEST[1]} or newer is needed, this is {sys.version.split()[0]}"
        )
    if PYTHON.exists():
        return
    try:
        venv.create(VENV, with_pip=True, clear=True)
    except (subprocess.CalledProcessError, ImportError):
        shutil.rmtree(VENV, ignore_errors=True)
        sys.exit("python cannot make a virtual environment here; install the package python3-venv")


def install(pins: str) -> None:
    """Install the pinned packages with hashes, then this project; skip what is done already."""
    make_venv()
    pin_file = ROOT / "constraints" / pins
    wanted = pin_file.read_bytes() + (ROOT / "pyproject.toml").read_bytes()
    stamp = VENV / f"installed-{pin_file.stem}"
    digest = hashlib.sha256(wanted).hexdigest()
    if stamp.exists() and stamp.read_text(encoding="utf-8") == digest:
        return
    pip = (PYTHON, "-m", "pip", "install", "--quiet", "--disable-pip-version-check")
    run(*pip, "--require-hashes", "-r", pin_file)
    # A local project cannot carry a hash, so it is a step of its own, without isolation:
    # its build tools are pinned in the same file.
    run(*pip, "--no-deps", "--no-build-isolation", "-e", ".", quiet=True)
    stamp.write_text(digest, encoding="utf-8")


def demo() -> None:
    """Run the built-in campaign and name its report."""
    install("run.txt")
    sys.exit(run(BIN / "lockspan", "demo", "demo-run", "--overwrite", check=False))


def test() -> None:
    """Check style, types and tests."""
    install("test.txt")
    run(PYTHON, "-m", "ruff", "check", ".")
    run(PYTHON, "-m", "ruff", "format", "--check", ".")
    run(PYTHON, "-m", "mypy", "--strict", *ROOMS)
    run(PYTHON, "-m", "pytest", *sys.argv[2:])


def test_long() -> None:
    """Run the long tests only."""
    install("test.txt")
    run(PYTHON, "-m", "pytest", "-m", "long", *sys.argv[2:])


def bench() -> None:
    """Run every benchmark and write its dated table."""
    install("test.txt")
    run(PYTHON, "bench/run.py", *sys.argv[2:])


def clean() -> None:
    """Remove the environment, caches and demo output."""
    made = (".venv", "demo-run", ".pytest_cache", ".mypy_cache", ".ruff_cache", ".hypothesis")
    for name in (*made, "build", "lockspan.egg-info"):
        shutil.rmtree(ROOT / name, ignore_errors=True)


STEPS = {
    "demo": demo,
    "test": test,
    "test-long": test_long,
    "bench": bench,
    "clean": clean,
}


def main(words: Sequence[str]) -> None:
    """Do the step that was named."""
    if len(words) < 2 or words[1] not in STEPS:
        sys.exit(f"usage: python3 steps.py {'|'.join(STEPS)}")
    STEPS[words[1]]()


if __name__ == "__main__":
    main(sys.argv)
