"""One capture measured by a sweep file's wiring and rules, and by two recorders."""

from __future__ import annotations

import math
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
import soundfile

from reports.looking import measure_file
from reports.options import UsageError, clock_words, order_word
from reports.stating import stated_plan
from rig.errors import LockspanError

RATE_HZ, FAST_PPM = 2000, 400.0
WIRING = """
[pair]
order = "1:1"
coupling = "one-way"

[reference]
channel = 2
polarity = -1
polarity_checked = "tap"

[driven]
channel = 1
unit = "m/s"
sensitivity = 0.5

[measure]
eps_turns = 0.2
hold = "0.4"
settle_s = 0.5

[[free_running]]
file = "alone.wav"
role = "driven"
"""


def measured(path: Path, **words: object) -> dict:
    """The JSON value of one measured capture."""
    return measure_file(str(path), words=words, read={}, picture=None)[1]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory, campaign_tools: ModuleType) -> Path:
    """A locked pair, its driven one alone, and a sweep file without points."""
    folder = tmp_path_factory.mktemp("words")
    samples = campaign_tools.pair_samples(49.9, coupling_hz=0.5, seconds=8.0, seed=3)
    campaign_tools.write_wav(folder / "pair.wav", samples)
    alone = campaign_tools.pair_samples(49.1, coupling_hz=0.0, seconds=8.0, seed=9)
    campaign_tools.write_wav(folder / "alone.wav", alone)
    (folder / "SWEEP.toml").write_text(WIRING, encoding="utf-8")
    return folder


def test_a_sweep_file_states_the_wiring_of_a_single_capture(folder: Path) -> None:
    """Polarity and sensitivity can be said nowhere else on the command line."""
    value = measured(folder / "pair.wav", sweep=str(folder / "SWEEP.toml"))
    assert (value["reference"]["channel"], value["driven"]["channel"]) == ("2", "1")
    assert value["driven"]["unit"] == "m/s"
    # 0.5 V at 0.5 V per m/s
    assert value["driven"]["amplitude"]["value"] == pytest.approx(1.0, abs=0.01)
    plain = measured(folder / "pair.wav", reference="2", driven="1")
    turned = value["episodes"][0]["offset_rad"] - plain["episodes"][0]["offset_rad"]
    assert abs(turned) == pytest.approx(math.pi, abs=0.01)


def test_free_running_captures_of_the_sweep_file_are_used(folder: Path) -> None:
    """They stand beside the sweep file, wherever the command is run."""
    plan = stated_plan({"sweep": str(folder / "SWEEP.toml")})
    assert [entry.file for entry in plan.free_running] == [str(folder / "alone.wav")]
    value = measured(folder / "pair.wav", sweep=str(folder / "SWEEP.toml"))
    assert value["state"] == "locked"


def test_a_note_says_where_wiring_and_rules_are_from(folder: Path) -> None:
    """Two results of one capture may differ by their sweep file."""
    value = measured(folder / "pair.wav", sweep=str(folder / "SWEEP.toml"))
    assert "SWEEP.toml" in str(value)


@pytest.mark.parametrize(
    ("words", "path", "expected"),
    [
        ({"reference": "1"}, ("reference", "channel"), "1"),
        ({"order": (2, 1)}, ("order",), (2, 1)),
        ({"order": "find"}, ("order",), None),
        ({"eps": 0.3}, ("measure", "eps_turns"), 0.3),
        ({"hold": "2beats"}, ("measure", "hold"), "2beats"),
        ({"settle_s": 0.0}, ("measure", "settle_s"), 0.0),
        ({"method": "marker"}, ("measure", "method_driven"), "marker"),
        ({"bands": ((1.0, 2.0), (3.0, 4.0))}, ("measure", "band_driven_hz"), (3.0, 4.0)),
        ({}, ("measure", "eps_turns"), 0.2),
        ({}, ("measure", "settle_s"), 0.5),
        ({}, ("reference", "polarity"), -1),
        ({"reference": "1"}, ("reference", "polarity"), -1),
    ],
)
def test_an_option_wins_over_the_sweep_file(
    folder: Path, words: dict, path: tuple[str, ...], expected: object
) -> None:
    """What is typed now is meant now; what is not typed is the file's."""
    found = stated_plan({"sweep": str(folder / "SWEEP.toml"), **words})
    for name in path:
        found = getattr(found, name)
    assert found == expected


def test_a_free_running_option_takes_the_place_of_those_of_its_role(folder: Path) -> None:
    """The other role's stay."""
    words = {"sweep": str(folder / "SWEEP.toml"), "free_driven": ["b.wav"]}
    assert [entry.file for entry in stated_plan(words).free_running] == ["b.wav"]


def test_a_broken_sweep_file_is_refused_by_its_own_name(folder: Path, tmp_path: Path) -> None:
    """Else one looks for the fault in the capture."""
    (tmp_path / "bad.toml").write_text("[pair]\norder = 3\n", encoding="utf-8")
    with pytest.raises(LockspanError) as refused:
        measured(folder / "pair.wav", sweep=str(tmp_path / "bad.toml"))
    assert str(refused.value).startswith(str(tmp_path / "bad.toml"))


@pytest.fixture(scope="module")
def recorders(tmp_path_factory: pytest.TempPathFactory, campaign_tools: ModuleType) -> Path:
    """A pair locked at 25.3 Hz on two recorders, the second 400 ppm fast; a shared 60 Hz."""
    folder = tmp_path_factory.mktemp("recorders")
    rng = np.random.default_rng(4)
    wander = 0.3 * np.sin(2 * math.pi * 0.03 * np.arange(0, 41, 0.001))

    def line(frequency_hz: float, time_s: np.ndarray, angle_rad: float) -> np.ndarray:
        common = np.interp(time_s, np.arange(wander.size) / 1000.0, wander)
        return 0.5 * np.cos(2 * math.pi * frequency_hz * time_s + angle_rad + common)

    for name, clock, angle_rad in (("a", 0.0, 0.0), ("b", FAST_PPM * 1e-6, 1.0)):
        time_s = np.arange(40 * RATE_HZ) / (RATE_HZ * (1.0 + clock))
        columns = [line(25.3, time_s, angle_rad), line(60.0, time_s, 0.4)]
        noise = 2e-3 * rng.standard_normal((time_s.size, 2))
        path = folder / f"{name}.wav"
        campaign_tools.write_wav(path, np.column_stack(columns) + noise, RATE_HZ)
    return folder


def two(folder: Path, **words: object) -> dict:
    """Two captures of one pair measured together."""
    second = str(folder / "b.wav")
    return measured(folder / "a.wav", driven="1", driven_file=second, free_spread=0.1, **words)


def test_two_recorders_without_a_tie_are_refused_in_one_line(recorders: Path) -> None:
    """50 ppm between clocks makes a locked pair seem to drift."""
    with pytest.raises(LockspanError, match="without a shared reference") as refused:
        two(recorders)
    assert str(refused.value).startswith(str(recorders / "b.wav"))
    assert "2000 Hz, 2000 Hz" in str(refused.value)
    assert "\n" not in str(refused.value)


def test_a_wrong_clock_makes_a_locked_pair_drift(recorders: Path) -> None:
    """The case the tie is for: 400 ppm at 25.3 Hz are 0.01 Hz."""
    value = two(recorders, clock_error_ppm=0.0)
    assert value["mean_rate_hz"]["value"] == pytest.approx(-25.3 * FAST_PPM * 1e-6, rel=0.02)


def test_a_stated_clock_error_is_taken_off(recorders: Path) -> None:
    """On the first clock both have one frequency and the pair is locked."""
    value = two(recorders, clock_error_ppm=FAST_PPM, clock_error_u_ppm=1.0)
    assert value["mean_rate_hz"]["value"] == pytest.approx(0.0, abs=1e-4)
    assert value["driven"]["frequency_hz"]["value"] == pytest.approx(25.3, abs=3e-3)
    assert value["state"] == "locked"
    assert value["slips"] == []


def test_the_uncertainty_of_the_clock_reaches_the_rates(recorders: Path) -> None:
    """1 ppm of 25.3 Hz, in quadrature with what the record itself leaves."""
    sure = two(recorders, clock_error_ppm=FAST_PPM, clock_error_u_ppm=0.0)
    unsure = two(recorders, clock_error_ppm=FAST_PPM, clock_error_u_ppm=40.0)
    share = math.sqrt(unsure["mean_rate_hz"]["u"] ** 2 - sure["mean_rate_hz"]["u"] ** 2)
    assert share == pytest.approx(25.3 * 40e-6, rel=1e-3)


def test_a_clock_too_uncertain_leaves_the_state_undecided(recorders: Path) -> None:
    """400 ppm could move psi by 0.8 turns in this record: lock or drift, nobody knows."""
    value = two(recorders, clock_error_ppm=FAST_PPM, clock_error_u_ppm=400.0)
    assert value["state"] == "undecided"
    assert "clock error is uncertain" in value["state_reason"]


def test_a_shared_channel_ties_the_clocks(recorders: Path) -> None:
    """A signal both recorded gives the error with no word from anybody."""
    value = two(recorders, shared="2")
    assert value["mean_rate_hz"]["value"] == pytest.approx(0.0, abs=2e-4)
    assert value["state"] == "locked"
    assert "clock error 400" in str(value) or "clock error 399.9" in str(value)


def test_without_the_start_no_angle_is_told(recorders: Path) -> None:
    """In phase or not: the second recorder may have started at any time."""
    value = two(recorders, clock_error_ppm=FAST_PPM)
    assert value["adler"]["offset_rad"]["value"] is None
    assert {episode["style"] for episode in value["episodes"]} == {"offset"}
    assert value["episodes"][0]["offset_u_rad"] > 1.7


def test_a_stated_start_gives_the_angle(recorders: Path) -> None:
    """Both started together here; the driven one leads by 1 rad."""
    value = two(recorders, clock_error_ppm=FAST_PPM, start_shift_s=0.0)
    assert value["episodes"][0]["offset_rad"] == pytest.approx(1.0, abs=0.01)
    assert value["episodes"][0]["offset_u_rad"] < 0.01


def test_a_clock_off_by_more_than_a_hundredth_is_refused(recorders: Path) -> None:
    """Ppm are easily mistaken for a ratio of rates."""
    with pytest.raises(LockspanError, match="within 1 %"):
        two(recorders, clock_error_ppm=51202.6)


@pytest.mark.parametrize(
    ("words", "text"),
    [
        ((None, 5.0, None, None, None), "--clock-error-ppm: .* give --driven-file"),
        ((None, None, None, None, 1.0), "--start-shift: .* give --driven-file"),
        (("b.wav", 5.0, None, "3", None), "give one of them"),
        (("b.wav", None, 5.0, None, None), "needs --clock-error-ppm"),
        (("b.wav", 5.0, -1.0, None, None), "a value from 0, got -1"),
    ],
)
def test_words_on_recorders_that_do_not_fit_are_refused(words: tuple, text: str) -> None:
    """A tie without a second recorder was meant for something else."""
    with pytest.raises(UsageError, match=text):
        clock_words(*words)


def test_an_order_not_given_is_left_to_the_file() -> None:
    """'find' is an order; silence is none."""
    assert order_word(None) == {}
    assert order_word("find") == {"order": "find"}
    assert order_word("2:1") == {"order": (2, 1)}


def test_the_only_channel_of_a_second_recorder_needs_no_naming(
    tmp_path: Path, recorders: Path
) -> None:
    """One-channel recorders are the usual case; there, channel 2 is nothing to ask for."""
    for name in ("a", "b"):
        samples, rate_hz = soundfile.read(recorders / f"{name}.wav")
        soundfile.write(tmp_path / f"{name}.wav", samples[:, 0], rate_hz, subtype="PCM_24")
    tie = {"clock_error_ppm": FAST_PPM, "clock_error_u_ppm": 1.0}
    value = measured(tmp_path / "a.wav", driven_file=str(tmp_path / "b.wav"), **tie)
    assert value["driven"]["frequency_hz"]["value"] == pytest.approx(25.3, abs=3e-3)
    with pytest.raises(LockspanError, match="no channel '2'"):
        measured(tmp_path / "a.wav", driven="2", driven_file=str(tmp_path / "b.wav"), **tie)


def test_an_angle_that_no_clock_gives_is_not_shown_as_one(recorders: Path) -> None:
    """(0 ± 100) degrees, offset, would read like a finding."""
    text = "psi cannot be determined (any angle)"
    words = {"driven": "1", "driven_file": str(recorders / "b.wav"), "free_spread": 0.1}
    tied = words | {"clock_error_ppm": FAST_PPM, "clock_error_u_ppm": 1.0}
    unshifted, known = (
        measure_file(str(recorders / "a.wav"), words=tied | more, read={}, picture=None)[0]
        for more in ({}, {"start_shift_s": 0.0})
    )
    assert text in unshifted
    assert text not in known
