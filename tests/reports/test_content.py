"""What a report says: every particular, every verdict with its ground, everything left out."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from types import ModuleType

import pytest

from reports.content import END, build_content
from reports.content_fields import ITEM_FIELDS, LAB_FIELDS, NOT_STATED
from reports.content_limits import budget_table, limit_table
from reports.content_method import DEFINITIONS
from reports.content_model import (
    Bullets,
    Fields,
    FigureRef,
    Gallery,
    Paragraph,
    ReportContent,
    Table,
    cells,
    columns,
    figure_refs,
)
from reports.content_points import points_table
from reports.figures.catalogue import picture_of
from reports.gallery import CARDS_MOST, gallery_rows
from reports.paper_units import paper_verdict
from reports.records import BudgetLine, Limit, SweepRun, Verdict
from rig.quantities import Quantity, undetermined
from rig.sweepfile.keys import ITEM_KEYS, LAB_KEYS


@pytest.fixture(scope="module")
def run(made: ModuleType) -> SweepRun:
    """A run of 28 points with one verdict of each kind."""
    return made.make_run(
        verdicts=tuple(map(made.make_verdict, ("pass", "fail", "undecided"))), verdict="fail"
    )


@pytest.fixture(scope="module")
def content(run: SweepRun) -> ReportContent:
    """Its report."""
    return build_content(run)


def _texts(content: ReportContent) -> Iterator[str]:
    """Every text of a report."""
    for section in content.sections:
        yield section.title
        for block in section.blocks:
            if isinstance(block, Paragraph):
                yield block.text
            elif isinstance(block, Bullets):
                yield from block.items
            elif isinstance(block, Fields):
                yield from (part for item in block.items for part in item)
            elif isinstance(block, Table):
                yield block.caption
                yield from (cell.text for row in block.rows for cell in row)
            elif isinstance(block, FigureRef):
                yield block.caption
            elif isinstance(block, Gallery):
                yield from (part for ref in block.figures for part in (ref.title, ref.caption))


def _fields_of(content: ReportContent, key: str) -> dict[str, str]:
    """All particulars of a section."""
    blocks = next(section.blocks for section in content.sections if section.key == key)
    return {name: text for block in blocks if isinstance(block, Fields)
            for name, text in block.items}  # fmt: skip


def test_every_particular_of_the_standard_is_there_even_when_absent(
    content: ReportContent,
) -> None:
    """ISO/IEC 17025 7.8.2: a field that is dropped in silence cannot be missed."""
    blocks = next(one.blocks for one in content.sections if one.key == "particulars")
    items = [item for block in blocks if isinstance(block, Fields) for item in block.items]
    told = {name for name, _text in items}
    absent = {label for name, text in items if name == "Not stated" for label in text.split("; ")}
    for label, _key in (*LAB_FIELDS, *ITEM_FIELDS):
        assert (label in told) != (label in absent)
    assert "Customer" in absent
    assert ("Report", "R-001") in items
    # One line for all, not a row each.
    assert NOT_STATED not in {text for _name, text in items}


def test_particulars_are_the_keys_of_the_sweep_file() -> None:
    """A key that the sweep file takes and the report drops would be lost work."""
    assert {key for _label, key in LAB_FIELDS} | {"title", "issued", "remarks"} == set(LAB_KEYS)
    assert {key for _label, key in ITEM_FIELDS} | {"remarks"} == set(ITEM_KEYS)


def test_fields_that_nobody_foresaw_are_printed_too(made: ModuleType, run: SweepRun) -> None:
    """What a lab states about its item belongs into its report."""
    plan = replace(run.plan, item=(*run.plan.item, ("spring_rate", "40 kN/m")))
    found = _fields_of(build_content(replace(run, plan=plan)), "particulars")
    assert found["Spring rate"] == "40 kN/m"


def test_equal_runs_give_equal_reports(run: SweepRun, content: ReportContent) -> None:
    """The bytes of page and paper follow from the content."""
    assert build_content(run) == content


def test_every_picture_referred_to_can_be_drawn(run: SweepRun, content: ReportContent) -> None:
    """A reference to nothing would break the page."""
    for key in content.figure_keys():
        assert picture_of(run, key).height_in > 0


def test_captions_are_one_sentence(content: ReportContent) -> None:
    """One sentence that says what is seen; more is read by nobody."""
    for ref in figure_refs(content):
        if not ref.key.startswith("record-"):
            assert ref.caption.endswith(".")
            assert ". " not in ref.caption.replace("e.g. ", "")


def test_the_verdict_says_which_limits_failed(content: ReportContent) -> None:
    """The first line must answer what failed."""
    line = content.sections[0].blocks[0]
    assert "1 fail (locking width)" in line.sentence
    assert "28 of 28 captures" in line.sentence


def test_the_limit_row_holds_limit_value_uncertainty_probability_rule_and_verdict(
    run: SweepRun,
) -> None:
    """ISO/IEC 17025 7.8.6 wants all of it beside the verdict."""
    row = [cell.text for cell in limit_table(run).rows[0]]
    assert row == [
        "locking width, level 1 A", "pass", "0.600 ± 0.012 Hz", "at least 0.5 Hz", "2",
        "> 0.9999", "guard band w = U",
    ]  # fmt: skip


def test_angles_are_written_in_degrees_with_their_limits_and_budget() -> None:
    """Nobody reads a limit of 0.5236 rad."""
    limit = Limit(name="offset", quantity="phase_offset_centre_rad", unit="rad", lower=-0.1,
                  upper=0.5, circular=True)  # fmt: skip
    lines = (
        BudgetLine(source="statistical", u=0.01, unit="rad", distribution="normal",
                   sensitivity=1.0, contribution=0.01),
        BudgetLine(source="skew", u=1e-5, unit="s", distribution="normal", sensitivity=157.0,
                   contribution=0.00157),
    )  # fmt: skip
    verdict = Verdict(
        limit=limit, value=Quantity(value=0.2, u=0.0101, unit="rad"), expanded_u=0.0202,
        coverage_factor=2.0, probability_met=1.0, verdict="pass", reason="", budget=lines,
    )  # fmt: skip
    shown = paper_verdict(verdict)
    assert shown.value.unit == shown.limit.unit == "deg"
    assert shown.limit.upper == pytest.approx(28.6479, abs=1e-4)  # 0.5 rad
    for line in shown.budget:
        assert line.u * line.sensitivity == pytest.approx(line.contribution, rel=1e-12)
    table = budget_table(verdict)
    assert [column.head for column in table.columns][4] == "Contribution (°)"
    assert table.rows[-1][0].text == "Expanded, k = 2"


def test_points_without_a_measurement_are_listed_with_their_reason(run: SweepRun) -> None:
    """A capture that vanished from a report would vanish from the verdict."""
    lost = replace(run.points[3], measurement=None, status="invalid", message="file\nis cut short")
    broken = replace(run, points=(*run.points[:3], lost, *run.points[4:]))
    texts = list(_texts(build_content(broken)))
    assert "file is cut short" in texts
    assert any("27 of 28 captures" in getattr(block, "sentence", "")
               for block in build_content(broken).sections[0].blocks)  # fmt: skip


def test_notes_of_records_stand_once_with_the_captures_they_concern(
    content: ReportContent,
) -> None:
    """28 times the same note hides the one that matters."""
    texts = list(_texts(content))
    assert texts.count("first 0.5 s dropped") == 1
    assert any("and 25 more" in text for text in texts)


def test_a_run_without_anything_still_has_its_report(made: ModuleType, run: SweepRun) -> None:
    """No limit, no region, no usable capture: said, not crashed."""
    lost = tuple(replace(point, measurement=None, status="invalid") for point in run.points)
    empty = replace(
        run, points=lost, region=None, free_runs=(), verdicts=(), verdict="undecided",
        plan=replace(run.plan, item=(), lab=()),
    )  # fmt: skip
    content = build_content(empty)
    assert content.report_id == NOT_STATED
    assert content.figure_keys() == []
    texts = " ".join(_texts(content))
    assert "do not give a locking range" in texts
    assert "No free-running capture" in texts


def test_an_open_edge_is_said_with_its_bound(run: SweepRun) -> None:
    """An empty cell would read as a misprint."""
    assert run.region is not None
    level = replace(run.region.levels[0], upper_hz=undetermined("Hz", "no point", low=25.4))
    region = replace(run.region, levels=(level, *run.region.levels[1:]))
    texts = list(_texts(build_content(replace(run, region=region))))
    assert "open on this side; above 25.4 Hz (95 %)" in texts


def test_range_words_are_defined_once(content: ReportContent) -> None:
    """Handbooks differ in these words, so the report says what it means by them."""
    names = [name for name, _text in DEFINITIONS]
    for word in ("Locking range", "Hold-in range", "Pull-in range"):
        assert names.count(word) == 1
    assert set(names) <= set(_fields_of(content, "definitions"))


def test_cautions_statements_and_the_end_are_there(content: ReportContent) -> None:
    """Rotating machines and live circuits can hurt; a report has a clear end."""
    texts = " ".join(_texts(content))
    for words in ("keep guards in place", "isolated probes", "local codes", "only to the items"):
        assert words in texts
    last = content.sections[-1].blocks[-1]
    assert isinstance(last, Paragraph)
    assert last.text == END


def test_overdue_calibrations_are_named(run: SweepRun) -> None:
    """A sensor past its date spoils a report, and nobody checks the table by eye."""
    plan = replace(
        run.plan,
        lab=(("performed", "2026-11-24 to 2026-11-26"),),
        instruments=(
            (("id", "A-1"), ("calibration_due", "2027-01-01")),
            (("id", "R-7"), ("calibration_due", "2026-11-25")),
        ),
    )
    texts = [text for text in _texts(build_content(replace(run, plan=plan))) if "was due" in text]
    assert texts == [
        "R-7: calibration was due 2026-11-25, before the end of the work on 2026-11-26"
    ]


def test_the_gallery_is_capped_and_shows_the_doubtful_first(
    made: ModuleType, run: SweepRun
) -> None:
    """A thousand pictures cannot be mailed; the ones in doubt must not be cut."""
    doubtful = replace(run.points[0].measurement.decision, state="undecided")
    last = replace(run.points[0], measurement=made.make_measurement(decision=doubtful))
    many = replace(run, points=(*run.points, *run.points, last))
    rows = gallery_rows(many)
    assert len(rows) == CARDS_MOST
    assert rows[0].index == len(many.points) - 1


def test_points_lead_to_their_pictures(run: SweepRun, content: ReportContent) -> None:
    """Each record must be reachable from the table."""
    keys = set(content.figure_keys())
    table = points_table(run, {0: "record-1"})
    assert table.rows[0][0].target == "record-1"
    assert "record-1" in keys
    assert table.caption.endswith("captures lie in captures/")
    assert not table.rows[0][0].text.startswith("captures/")


def test_a_row_of_the_wrong_length_is_refused() -> None:
    """A shifted table would print values under wrong heads."""
    with pytest.raises(ValueError, match="differs from its columns"):
        Table(caption="t", columns=columns("a", "b"), rows=(cells("1"),))


def test_tables_of_a_very_long_run_are_cut_and_say_so(run: SweepRun) -> None:
    """Ten thousand rows are two hundred pages that nobody reads; the files hold them all."""
    long_run = replace(
        run,
        points=run.points * 20,
        provenance=replace(run.provenance, inputs=run.provenance.inputs * 600),
    )
    content = build_content(long_run)
    tables = [block for section in content.sections for block in section.blocks
              if isinstance(block, Table)]  # fmt: skip
    assert max(len(table.rows) for table in tables) == 500
    texts = " ".join(_texts(content))
    assert "500 of 560 usable points are printed" in texts
    assert "the first 500 of 600" in texts
