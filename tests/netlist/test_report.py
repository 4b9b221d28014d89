"""The report tells the truth, shows hostile text as text, and needs nothing but itself."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from dataclasses import replace
from html.parser import HTMLParser

import pytest

from netlist.partslist import parts_list
from netlist.records import design_record
from netlist.report.found import check_rows, margin
from netlist.report.page import headline, inlined, report_page
from netlist.report.wording import decibel, number, quantity, share, stated
from synth.evidence import Check
from synth.job import Loop
from synth.loop import LoopBoards, Percentiles, loop_margins
from synth.results import Drift, LoopResult
from synth.transfer import TransferFunction
from tests.netlist import boards

HOSTILE = "<script>alert(1)</script> & \"quotes\" 'single' {{ 7*7 }}\nline\x00\x1b[31m"


class Page(HTMLParser):
    """Collects tags with their attributes, ids and the text between tags."""

    VOID = frozenset({"meta", "path", "rect", "line", "circle", "use", "br"})

    def __init__(self, text):
        super().__init__()
        self.tags, self.ids, self.open, self.words = [], [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        self.ids += [v for k, v in attrs if k == "id"]
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        self.ids += [v for k, v in attrs if k == "id"]

    def handle_endtag(self, tag):
        if tag not in self.VOID:
            assert self.open.pop() == tag

    def handle_data(self, data):
        self.words.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.words).split())


def page(*, failure=None, **changes):
    made = boards.design(**changes)
    return report_page(
        made,
        boards.verification(made, failure=failure),
        drawings=boards.drawings(),
        lines=parts_list(made.circuit, supply=made.job.board.supply),
        job_name="low-pass.toml",
    )


def test_every_tag_is_closed_and_no_id_is_used_twice():
    found = Page(page())
    assert found.open == []
    assert len(found.ids) == len(set(found.ids))


def test_nothing_is_loaded_from_elsewhere():
    text = page()
    for tag, attributes in Page(text).tags:
        assert tag not in ("link", "iframe", "img", "object", "base")
        assert "src" not in attributes
        for name in ("href", "xlink:href", "action"):
            assert attributes.get(name, "#").startswith("#")
    assert "@import" not in text
    assert not re.search(r"url\((?!#)", text)


def test_hostile_text_in_the_title_and_notices_stays_text():
    text = page(title=HOSTILE, notices=(HOSTILE,))
    found = Page(text)
    assert sum(tag == "script" for tag, _ in found.tags) == 2
    assert "<script>alert" not in text
    assert "{{ 7*7 }}" in found.text
    assert "\x00" not in text
    assert "\x1b" not in text


def test_a_pass_says_pass_and_no_warning_banner():
    text = page()
    assert 'class="stamp pass"' in text
    assert 'class="banner"' not in text


def test_unverified_has_a_banner_with_the_reason_and_what_to_do():
    found = Page(page(failure="the ngspice library is not installed"))
    assert "NOT VERIFIED" in found.text
    assert "the ngspice library is not installed" in found.text
    assert "apt-get install" in found.text
    assert found.text.index("NOT VERIFIED") < found.text.index("boards within limits")
    assert ("class", "stamp unverified") in [p for _, a in found.tags for p in a.items()]


def test_a_yield_below_nine_in_ten_without_a_limit_draws_a_warning():
    assert "only 86.67" in Page(page(boards=60)).text
    assert "No limit on the yield is stated" not in page(boards=1000)


def test_the_assumption_stands_beside_the_yield():
    assert "rests on an assumption" in page()


@pytest.mark.parametrize(
    "word",
    [
        "15.8\xa0kΩ",
        "coupling from x1 into x2",
        "10n",
        "C0G 50V",
        "16.2\xa0V/s",
        "--seed 1",
        "Clopper",
    ],
)
def test_what_a_review_asks_for_is_on_the_page(word):
    assert word in " ".join(Page(page()).words)


def test_the_same_design_gives_the_same_page():
    assert page() == page()


def test_a_drawing_keeps_its_ids_and_its_style_to_itself():
    drawn = str(inlined(boards.drawings().bode, "bode"))
    assert drawn.startswith("<svg")
    assert 'id="bode-patch_2"' in drawn
    assert "#drawing-bode svg * {" in drawn
    ET.fromstring(drawn)


def test_a_missed_limit_is_named_in_the_headline():
    checks = (Check("a", 1.0, 2.0, "V", False), Check("b", 1.0, 0.5, "V", True))
    assert headline(checks, "fail") == "1 of 2 limits missed: a."
    assert "1 of 1" in headline(checks[1:], "pass")


@pytest.mark.parametrize(
    ("check", "expected"),
    [
        (Check.at_most("x", 2.0, 3.0, "V"), 1.0),
        (Check.at_most("x", 4.0, 3.0, "V"), -1.0),
        (Check.at_least("x", 99.0, 95.0, "%"), 4.0),
        (Check.at_least("x", 90.0, 95.0, "%"), -5.0),
        (Check.at_most("x", 3.0, 3.0, "V"), 0.0),
        (Check.at_most("x", 3.0, None, "V"), None),
    ],
)
def test_a_margin_is_positive_inside_the_limit_whichever_way_it_points(check, expected):
    assert margin(check) == expected


def test_numbers_read_well_and_round_up_across_a_prefix():
    assert quantity(999.96, "Hz", 4) == "1.000\xa0kHz"
    assert quantity(-0.002, "V") == "−2.00\xa0mV"
    assert number(float("nan")) == "–"
    assert number(9.999e5) == "1000000"
    assert number(0.99996, 4) == "1.000"
    assert number(99.996, 4) == "100.0"
    assert decibel(1e-9) == "0.0000"
    assert stated(47e-9, "F") == "47\xa0nF"
    assert stated(100.0, "Hz") == "100\xa0Hz"


@pytest.mark.parametrize("boards_passed", [0, 1, 5_000, 9_995, 9_999, 99_999, 999_999])
def test_a_share_is_all_or_none_only_where_it_is(boards_passed):
    """Whatever the count of boards: read back, a share short of 1 is below 100 %."""
    for run in (10_000, 100_000, 1_000_000):
        ratio = min(boards_passed / run, 1.0)
        back = float(share(ratio).partition("\xa0")[0])
        assert (back == 100, back == 0) == (ratio == 1, ratio == 0)
        assert back == pytest.approx(100 * ratio, abs=0.005)
    (row,) = check_rows([Check("yield", 99.0, 99.9999, "%", True, "9 at 7.779e+04 Hz")])
    assert row["value"] == "99.9999\xa0%"
    assert row["note"] == "9 at 77.8\xa0kHz"


def test_what_was_not_measured_is_a_dash_not_a_crash():
    made = replace(boards.design(), swings=(), drifts=(), candidates=())
    text = report_page(
        made,
        boards.verification(made, failure="x"),
        drawings=boards.drawings(),
        lines=(),
    )
    assert "none drifts to a rail by itself" in text


def test_the_drift_of_an_integrator_behind_another_is_told_with_its_condition():
    one = Drift(amplifier="U1", net="x1", rate=16.2)
    two = Drift(amplifier="U2", net="out", rate=250.0, behind=("U1",))
    made = replace(boards.design(), drifts=(one, two))
    checked = boards.verification(made)
    text = Page(report_page(made, checked, drawings=boards.drawings(), lines=())).text
    assert "offset and bias current of the integrator itself, Vos/(RC) + Ib/C" in text
    assert "U1 x1 16.2 V/s U2 out 250 V/s with U1 at 0 V; ever faster as it drifts" in text


def test_an_operating_point_at_ground_is_one_sentence_and_another_is_listed():
    made = boards.design()
    checked = boards.verification(made)
    stuck = replace(checked, operating_point={"out": -10.5, "x1": 0.0})

    def shown(verification):
        return Page(report_page(made, verification, drawings=boards.drawings(), lines=())).text

    assert "0\xa0V at every net (3 nets" in shown(checked).replace(" V at", "\xa0V at")
    assert "1 of 2 nets are not at" in shown(stuck)
    assert "−10.5" in shown(stuck)


def test_what_fails_stands_at_the_top_of_the_checks():
    missed = Check("peak at U9", 10.5, 12.0, "V", False)
    found = Page(page(checks=(*boards.LIMITS, missed))).text
    table = found[found.index("limit value margin result") :]
    assert table.index("peak at U9") < table.index("magnitude error")


def test_poles_are_counted_in_whole_numbers():
    (row,) = check_rows([Check("closed loop", 0.0, 106.0, "unstable poles", False)])
    assert (row["value"], row["margin"]) == ("106\xa0unstable poles", "–")


def test_with_a_loop_the_note_below_the_checks_still_sends_to_the_spread_alone():
    made = boards.design()
    plant = TransferFunction.from_polynomials([1000.0], [1.0, 1.0])
    around = Loop(plant=plant)
    margins = loop_margins(around, made.job.target)
    made = replace(
        made,
        job=replace(made.job, loop=around),
        loop=LoopResult(target=margins, nominal=margins),
    )
    found = Page(
        report_page(made, boards.verification(made), drawings=boards.drawings(), lines=())
    ).text
    assert "closed-loop poles" in found
    assert "assumed distributions of part values ( spread )." in found


def test_the_limit_that_bites_first_is_told_in_one_line():
    found = Page(page()).text
    assert "First to bite: the swing of U1. There the op-amp has 5.00 times what is needed" in found


def test_the_loop_over_the_boards_stands_beside_the_nominal_one():
    """Percentiles, a dash where there is none, and how many boards keep the loop."""
    made = boards.design()
    margins = loop_margins(Loop(plant=TransferFunction.from_polynomials([1.0], [1.0, 1.0])),
                           made.job.target)  # fmt: skip
    none = Percentiles(p5=None, p50=None, p95=None)
    some = Percentiles(p5=41.5, p50=52.5, p95=63.5)
    run = LoopBoards(
        boards=60, stable=58, passed=57, low=0.86, high=0.99, confidence=0.95,
        phase_margin_deg=some, gain_margin_db=none, crossover_hz=none, disk_margin=some,
    )  # fmt: skip
    made = replace(
        made,
        job=replace(made.job, loop=Loop(plant=TransferFunction.from_polynomials([1.0], [1.0]))),
        loop=LoopResult(target=margins, nominal=margins, boards=run),
    )
    found = Page(
        report_page(made, boards.verification(made), drawings=boards.drawings(), lines=())
    ).text
    assert "41.5 52.5 63.5" in found
    assert "58 of 60 boards are stable by the Nyquist criterion, and 57 of them" in found
    assert "The boards are those of the tolerance run" in found
    longer = replace(made, tolerance=replace(made.tolerance, boards=400))
    page_of_longer = report_page(
        longer, boards.verification(longer), drawings=boards.drawings(), lines=()
    )
    text = Page(page_of_longer).text
    assert "The boards are the first 60 of the 400 of the tolerance run" in text
    assert "all would take too long where responses are as sharp as here." in text
    record = design_record(made, boards.verification(made))["loop"]["boards"]
    assert record["phase_margin_deg"] == {"p5": 41.5, "p50": 52.5, "p95": 63.5}
    assert record["gain_margin_db"]["p50"] is None
    assert (record["stable"], record["passed"], record["low"]) == (58 / 60, 57, 0.86)
