"""The stored reference values against the script that computes them, by roads of its own."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import pytest

SCRIPT = Path(__file__).resolve().parents[2] / "fixtures" / "make_check_tables.py"
SPEC = importlib.util.spec_from_file_location("make_check_tables", SCRIPT)
assert SPEC is not None
assert SPEC.loader is not None
maker = importlib.util.module_from_spec(SPEC)
SPEC.loader.exec_module(maker)

# Source: as each test says that uses a table; the formulas stand in the script
# Read: recomputed with mpmath at 30 digits or more, the ramps by DOP853
# Printed: fixtures/check_tables.json
# Converted: no
# Tolerance: one unit of the twelfth digit; ramps 1e-7, exact Rayleigh integrals 1e-9 absolute
SLOW = ("noisy_adler", "circular")
RELATIVE = {"sweep_overshoot": 1e-7, "regression_discretisation_bias": 1e-9}


def leaves(tree, path=""):
    """Every number of a table by its place; texts are numbers with their digits."""
    if isinstance(tree, dict):
        items = list(tree.items())
    elif isinstance(tree, list):
        items = list(enumerate(tree))
    else:
        return {path: float(tree)}
    return {
        place: value
        for key, part in items
        for place, value in leaves(part, f"{path}/{key}").items()
    }


def compare(name, stored, computed):
    """Same places, same numbers."""
    old, new = leaves(stored), leaves(computed)
    assert old.keys() == new.keys()
    for place, value in old.items():
        loose = 1e-9 if "p_exact" in place else 1e-300
        close = pytest.approx(value, rel=RELATIVE.get(name, 1e-11), abs=loose)
        assert new[place] == close, f"{name}{place}"


def test_nothing_is_stored_that_is_not_computed(check_tables):
    """A table without its origin cannot be trusted."""
    assert check_tables.keys() == maker.TABLES.keys()


@pytest.mark.parametrize("name", sorted(set(maker.TABLES) - set(SLOW)))
def test_a_table_is_what_its_script_computes(check_tables, name):
    """Stored digits were not typed by hand."""
    compare(name, check_tables[name], maker.table(name))


@pytest.mark.parametrize("row", [("0", "0.05"), ("0.5", "0.2"), ("1", "0.5"), ("3", "2")])
def test_rows_of_the_noisy_phase_equation(check_tables, row):
    """Four of the 96 here; all of them in the long tests."""
    rows = check_tables["noisy_adler"]["rows"]
    (stored,) = [one for one in rows if (one["dw_over_K"], one["D_over_K"]) == row]
    with maker.mp.workdps(maker.DIGITS):
        compare("noisy_adler", stored, maker.noisy_row(*row))


@pytest.mark.parametrize("noise", ["0.05", "0.5"])
def test_diffusion_by_the_eigenvalue_is_that_of_lifson_and_jackson(noise):
    """Without detuning there is a closed form: the script's own check."""
    # D / I0(K/D)^2, Lifson and Jackson 1962 (recalled); the eigenvalue is taken at 1e-10.
    with maker.mp.workdps(maker.DIGITS):
        d = maker.mp.mpf(noise)
        closed = d / maker.mp.besseli(0, 1 / d) ** 2
        assert float(maker.diffusion(maker.mp.mpf(0), d) / closed) == pytest.approx(1, abs=1e-14)


@pytest.mark.long
@pytest.mark.parametrize("name", SLOW)
def test_a_long_table_is_what_its_script_computes(check_tables, name):
    """Bessel functions of imaginary order, eigenvalues with 200 digits, Rayleigh integrals."""
    compare(name, check_tables[name], maker.table(name))
