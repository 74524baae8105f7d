"""Make the pinned requirement files again: python constraints/compile.py (needs pip-tools).

``run.txt`` is what the tool needs, ``test.txt`` what its tests need as well. Both carry
hashes and no address of a package index. Packages that only Windows needs are compiled
apart and marked, because the compiler resolves markers for the system it runs on.
"""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent
QUIET = [
    "--quiet",
    "--generate-hashes",
    "--allow-unsafe",
    "--strip-extras",
    "--no-header",
    "--no-emit-index-url",
    "--no-emit-find-links",
    "--no-emit-trusted-host",
    "--no-annotate",
]


def compile_file(target: str, *words: str) -> None:
    """Write one pinned file from its inputs."""
    command = [sys.executable, "-m", "piptools", "compile", *QUIET, "-o", target, *words]
    subprocess.run(command, check=True, cwd=HERE.parent)


def mark_for_windows(text: str) -> str:
    """Put the Windows marker behind every pin."""
    return re.sub(r"^(\S+==\S+) \\$", r'\1 ; sys_platform == "win32" \\', text, flags=re.M)


def main() -> int:
    """Compile all files and refuse any address or path in them."""
    compile_file("constraints/windows.txt", "constraints/windows.in")
    extra = mark_for_windows((HERE / "windows.txt").read_text(encoding="utf-8"))
    (HERE / "windows.txt").unlink()
    compile_file("constraints/run.txt", "pyproject.toml", "constraints/build.in")
    extras = [word for name in ("test", "formats", "cluster") for word in ("--extra", name)]
    compile_file(
        "constraints/test.txt",
        *["-c", "constraints/run.txt", *extras, "pyproject.toml", "constraints/build.in"],
    )
    for name in ("run.txt", "test.txt"):
        path = HERE / name
        lines = path.read_text(encoding="utf-8").splitlines()
        text = "\n".join(line for line in lines if not line.startswith("#")).strip()
        text = text + "\n" + extra.strip() + "\n"
        if "://" in text or "--find-links" in text or "file:" in text:
            print(f"{path.name}: holds an address", file=sys.stderr)
            return 1
        path.write_text(text, encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
