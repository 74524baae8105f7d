"""House rules that a machine can check: directions, doors, docstrings, names, fixtures."""

from __future__ import annotations

import ast
import hashlib
import re
import subprocess
import sys
from pathlib import Path

import pytest
import source_tree

ROOT = source_tree.ROOT
FILES = source_tree.source_files()
IDS = [str(path.relative_to(ROOT)) for path in FILES]
ALLOWED = {"rig": {"rig"}, "fit": {"rig", "fit"}, "reports": {"rig", "fit", "reports"}}
# Foreign packages stop at the door of a few files.
DOORS = {
    "lmfit": {"fit/lmfit_models.py"},
    "typer": {"reports/cli.py", "reports/cli_options.py"},
    "matplotlib.pyplot": set(),
}
# Rooms where reading and writing files is the job.
FILE_DOORS = re.compile(
    r"rig/readers/|rig/sweepfile|reports/(runs|store|demo|draft|cli|verify|compare|cache|"
    r"provenance|commands|loading)"
)


@pytest.mark.parametrize("path", FILES, ids=IDS)
def test_imports_point_one_way(path: Path) -> None:
    """reports -> fit -> rig: a lower room that knows a higher one cannot be used alone."""
    room = path.relative_to(ROOT).parts[0]
    rooms = {name.split(".")[0] for name in source_tree.imported_modules(source_tree.tree_of(path))}
    assert rooms & {"rig", "fit", "reports"} <= ALLOWED[room]


@pytest.mark.parametrize("path", FILES, ids=IDS)
def test_foreign_packages_stop_at_their_door(path: Path) -> None:
    """A package used in one file can be replaced; one used everywhere cannot."""
    name = str(path.relative_to(ROOT))
    modules = set(source_tree.imported_modules(source_tree.tree_of(path)))
    for package, doors in DOORS.items():
        used = any(module == package or module.startswith(package + ".") for module in modules)
        assert not used or name in doors, f"{name} imports {package}"


@pytest.mark.parametrize("path", FILES, ids=IDS)
def test_core_files_keep_out_of_print_global_chance_and_files(path: Path) -> None:
    """Side effects live in a few files; everything else is a function of its arguments."""
    name = str(path.relative_to(ROOT))
    for node in ast.walk(source_tree.tree_of(path)):
        if not isinstance(node, ast.Call):
            continue
        called = ast.unparse(node.func)
        assert called != "print" or name == "reports/cli.py"
        assert not re.match(r"(np|numpy)\.random\.(?!default_rng|Generator|SeedSequence)", called)
        assert called != "warnings.warn"
        assert called != "open" or FILE_DOORS.match(name), f"{name} opens a file"


@pytest.mark.parametrize("path", FILES, ids=IDS)
def test_every_public_name_has_a_docstring(path: Path) -> None:
    """What a function gives, in which unit, is part of the function."""
    tree = source_tree.tree_of(path)
    assert ast.get_docstring(tree) is not None
    bare = [
        node.name for node in source_tree.public_definitions(tree) if not ast.get_docstring(node)
    ]
    assert bare == []


@pytest.mark.parametrize("path", FILES, ids=IDS)
def test_modules_stay_small_enough_for_one_subject(path: Path) -> None:
    """A module of over 450 lines holds more than one subject."""
    assert len(path.read_text(encoding="utf-8").splitlines()) <= 450


@pytest.mark.parametrize("words", [["--help"], ["--version"], ["measure", "--help"]])
def test_help_loads_nothing_heavy(words: list[str]) -> None:
    """Help must answer at once; numpy and friends cost a second."""
    code = (
        "import sys\nsys.argv = ['lockspan', *sys.argv[1:]]\nfrom reports.cli import main\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'lmfit', 'matplotlib', 'soundfile'} & set(sys.modules)\n"
        "sys.exit(3 if heavy else 0)"
    )
    result = subprocess.run(
        [sys.executable, "-c", code, *words], capture_output=True, text=True, cwd=ROOT, check=False
    )
    assert result.returncode == 0, result.stdout + result.stderr


def test_every_fixture_has_its_line_and_its_digest() -> None:
    """A fixture without origin and digest can change under a test without a word."""
    listed = (ROOT / "fixtures" / "README.md").read_text(encoding="utf-8")
    for path in sorted((ROOT / "fixtures").rglob("*")):
        if path.is_dir() or path.name == "README.md" or "__pycache__" in path.parts:
            continue
        name = path.relative_to(ROOT / "fixtures").as_posix()
        digest = hashlib.sha256(path.read_bytes()).hexdigest()[:16]
        assert f"`{name}`" in listed, f"fixtures/README.md has no line for {name}"
        assert digest in listed, f"{name} has digest {digest}, not the one in fixtures/README.md"


def test_every_published_check_names_its_source() -> None:
    """The five-field note beside a published value lets a reader check the check."""
    fields = ("Source:", "Read:", "Printed:", "Converted:", "Tolerance:")
    for path in sorted((ROOT / "tests" / "published").glob("test_*.py")):
        text = path.read_text(encoding="utf-8")
        missing = [field for field in fields if field not in text]
        assert missing == [], f"{path.name} lacks {missing}"


def test_pins_carry_hashes_and_no_address() -> None:
    """A pinned file with an address works on one machine only."""
    for path in sorted((ROOT / "constraints").glob("*.txt")):
        text = path.read_text(encoding="utf-8")
        assert "://" not in text
        assert "find-links" not in text
        pins = re.findall(r"^\S+==\S+", text, flags=re.M)
        assert len(pins) > 20
        assert text.count("--hash=sha256:") >= len(pins)
