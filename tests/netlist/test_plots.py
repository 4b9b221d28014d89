"""Plots show their data, say what is missing, and are the same bytes every time."""

from __future__ import annotations

import math
import os
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pytest

from netlist.plots import bode_plot, driver_chart, noise_plot, step_plot, style, swing_chart
from netlist.plots.bode import magnitude_range, unwrapped_deg
from netlist.report.boards import LONGEST_REMARK, driver_remarks
from netlist.schematic.lettering import width
from netlist.svg import escape, prefix_ids
from synth.boardruns import Driver, ToleranceResult
from synth.job import Accept
from synth.results import Swing
from synth.transfer import Factor, TransferFunction
from tests.netlist import boards

W = 2 * math.pi
F = np.geomspace(1, 20e3, 300)
TIME = np.linspace(0, 5e-3, 200)
TARGETS = {
    "lead-lag": TransferFunction.from_factors(
        1e5 * W,
        [Factor.real(-W * 30), Factor.real(-W * 120)],
        [Factor.real(-W * 5), Factor.real(-W * 2000), Factor.real(-W * 4000)],
    ),
    "notch": TransferFunction.from_factors(
        3e4, [Factor.pair(W * 150, math.inf)], [Factor.pair(W * 160, 0.6), Factor.real(-W * 3000)]
    ),
    "PI": TransferFunction.from_factors(
        -2, [Factor.real(-W * 10)], [Factor.real(0), Factor.real(-W * 5e3)]
    ),
    "Butterworth 6": TransferFunction.from_factors(
        (W * 1000) ** 6,
        [],
        [Factor.pair(W * 1000, 1 / (2 * math.sin(math.pi * k / 12))) for k in (1, 3, 5)],
    ),
}


def tolerance(f=F) -> ToleranceResult:
    spread = 0.2 + 0.1 * np.sin(np.log(f))
    return ToleranceResult(
        boards=1000,
        passed=990,
        low=0.98,
        high=0.995,
        confidence=0.95,
        frequency_hz=f,
        magnitude_5=-spread,
        magnitude_95=1.1 * spread,
        phase_5=-4 * spread,
        phase_95=4.4 * spread,
        error_95_db=0.3,
        seed=1,
    )


def off_by(target, db=0.17, deg=1.3):
    """A response with errors of at most these."""
    x = np.linspace(0, 9, target.size)
    return target * 10 ** (db / 20 * np.sin(x)) * np.exp(1j * np.radians(deg) * np.cos(x))


def bode(name="lead-lag", **changes) -> str:
    target = TARGETS[name].response(F)
    options = {"tolerance": tolerance(), "accept": Accept(), "title": name} | changes
    simulated = options.pop("simulated", off_by(target))
    return bode_plot(F, target, simulated, **options)


def swings() -> tuple[Swing, ...]:
    return tuple(
        Swing(
            amplifier=f"U{k}",
            net=f"x{k}",
            peak=peak,
            peak_limit=10.5,
            peak_hz=hz,
            slew=1.0,
            slew_limit=2.0,
            current=0.001,
            current_limit=0.02,
        )
        for k, (peak, hz) in enumerate(((3.2, 1234.5), (10.4, None), (11.8, 20.0)), start=1)
    )


def drivers() -> tuple[Driver, ...]:
    return (
        Driver(refs=("C3",), kind="capacitor", share=0.42),
        Driver(refs=("U1", "U2", "U3"), kind="op_amp", share=0.105),
        *(Driver(refs=(f"R{k}",), kind="resistor", share=0.01 / k) for k in range(1, 15)),
    )


def all_plots() -> list[str]:
    voltages = {"x1": 2 * np.sin(900 * TIME), "out": 10 * (1 - np.exp(-2000 * TIME))}
    return [
        *(bode(name, prefix=f"bode{k}") for k, name in enumerate(("notch", "PI"))),
        step_plot(TIME, voltages, rails=(-12, 12), output_net="out", title="Step of 1 V"),
        noise_plot(F, 1e-7 / (1 + F / 300), title="Noise at the output"),
        swing_chart(swings()),
        driver_chart(drivers(), remarks=("±5 %, rate of x1",)),
    ]


def texts(svg: str) -> list[str]:
    return ["".join(el.itertext()) for el in ET.fromstring(svg).iter() if el.tag.endswith("}text")]


def paths(svg: str, colour: str) -> list[np.ndarray]:
    """Points of the lines of one colour, shapes (n, 2)."""
    out = []
    for el in ET.fromstring(svg).iter():
        if el.tag.endswith("}path") and f"stroke: {colour}" in (el.get("style") or ""):
            numbers = re.findall(r"-?\d+(?:\.\d+)?", el.get("d"))
            out.append(np.array(numbers, dtype=float).reshape(-1, 2))
    return out


@pytest.mark.parametrize("db", [0.17, 0.31, 0.6])
def test_the_error_curve_stands_where_the_limits_say(db):
    """Read back from the SVG: the drawn limits give the scale, the curve the largest error."""
    target = TARGETS["lead-lag"].response(F)
    svg = bode(simulated=off_by(target, db), accept=Accept(magnitude_db=0.5), tolerance=None)
    limits = [p for p in paths(svg, style.LIMIT) if len(p) == 2 and np.ptp(p[:, 0]) > 100]
    lower, upper = (p[0, 1] for p in limits[:2])
    per_db = (lower - upper) / 1.0
    curves = [p for p in paths(svg, style.FOUND) if len(p) > 3]
    error = curves[2]
    assert (lower + upper) / 2 - error[:, 1].min() == pytest.approx(db * per_db, abs=0.15)
    assert error[:, 1].max() - (lower + upper) / 2 == pytest.approx(db * per_db, abs=0.15)


@pytest.mark.parametrize("name", TARGETS)
def test_the_phase_is_continuous_and_that_of_the_factors(name):
    """Against the sum of the angles of the factors, which is continuous by itself."""
    target = TARGETS[name]
    s = 1j * W * F
    angle = np.full(F.shape, 180.0 if target.gain < 0 else 0.0)
    for factors, sign in ((target.zero_factors, 1), (target.pole_factors, -1)):
        for factor in factors:
            angle += sign * np.degrees(np.angle(factor.at(s)))
    phase = unwrapped_deg(target.response(F))
    turns = (phase - angle) / 360
    np.testing.assert_allclose(turns, np.round(turns), rtol=0, atol=1e-9)
    if name != "notch":
        np.testing.assert_allclose(turns, turns[0], rtol=0, atol=1e-9)
    assert -190 < phase[0] <= 170


def test_a_zero_on_the_axis_leaves_a_gap_and_is_named():
    f = np.sort(np.append(F, 150.0))
    target = TARGETS["notch"].response(f)
    target[np.searchsorted(f, 150.0)] = 0
    svg = bode_plot(f, target, off_by(target), tolerance=None, accept=Accept(), title="notch")
    assert "none where the target is zero" in texts(svg)
    assert "nan" not in svg.lower().replace("dominant", "") and "inf" not in svg
    assert np.isnan(unwrapped_deg(target)).sum() == 1


def test_a_deep_notch_does_not_stretch_the_decibel_axis_and_a_slope_is_shown_whole():
    f = np.geomspace(1, 20e3, 4001)
    notch = 20 * np.log10(np.abs(TARGETS["notch"].response(np.append(f, 150.0 + 1e-9))))
    low, high = magnitude_range(notch)
    assert np.min(notch) < np.max(notch) - 120
    assert high - low < 70 and high > np.max(notch)
    slope = 20 * np.log10(np.abs(TARGETS["Butterworth 6"].response(f)))
    low, high = magnitude_range(slope)
    assert low < np.min(slope) and high > np.max(slope)
    assert magnitude_range(np.array([-np.inf])) == (-1.0, 1.0)


def test_a_picture_without_a_simulation_says_so():
    target = TARGETS["PI"].response(F)
    unverified = bode("PI", simulated=None, predicted=off_by(target))
    assert "UNVERIFIED: no result from ngspice" in texts(unverified)
    assert "predicted, not simulated" in texts(unverified)
    assert "ngspice" not in texts(unverified)
    verified = texts(bode("PI"))
    assert "ngspice" in verified and not any("UNVERIFIED" in t for t in verified)
    assert any("UNVERIFIED" in t for t in texts(bode("PI", simulated=None, tolerance=None)))


def test_errors_far_beyond_the_limit_are_named():
    target = TARGETS["PI"].response(F)
    shown = texts(bode("PI", simulated=off_by(target, db=4), tolerance=None))
    assert any(re.fullmatch(r"off the scale: up to (4|3\.99\d*) dB", t) for t in shown)
    assert not any("off the scale" in t for t in texts(bode("PI")))


def test_the_phase_found_is_drawn_on_the_branch_of_the_target():
    """The angle of a sixth-order low-pass wraps at -180 degrees on either side of the target."""
    target = TARGETS["Butterworth 6"].response(F)
    found = off_by(target, deg=8)
    assert np.max(np.abs(np.angle(found) - np.angle(target))) > 6, "the angles do wrap"
    svg = bode("Butterworth 6", simulated=found, tolerance=None)
    phase = [p for p in paths(svg, style.FOUND) if len(p) > 3][1]
    wanted = [p for p in paths(svg, style.WANTED) if len(p) > 3][1]
    apart = phase[:, 1] - np.interp(phase[:, 0], wanted[:, 0], wanted[:, 1])
    assert np.max(np.abs(apart)) < 8, "points of 1/72 inch; a turn is more than 100"


def test_rails_are_drawn_when_a_voltage_comes_near_them():
    flat = {"out": 0.1 * np.ones_like(TIME)}
    near = {"out": 7.0 * np.sin(900 * TIME)}
    options = {"rails": (-12.0, 12.0), "output_net": "out", "title": "x"}
    assert "rails" not in texts(step_plot(TIME, flat, **options))
    assert "rails" in texts(step_plot(TIME, near, **options))
    assert "time [ms]" in texts(step_plot(TIME, near, **options))
    assert "target" in texts(step_plot(TIME, near, ideal=near["out"], **options))


def test_an_output_over_its_limit_stands_out():
    shown = texts(swing_chart(swings()))
    assert "3.2 of 10.5 V at 1.23 kHz" in shown
    assert "10.4 of 10.5 V" in shown
    svg = swing_chart(swings())
    assert svg.count(f"fill: {style.LIMIT}") == 2, "one bar and its text"
    assert swing_chart(swings()[:2]).count(f"fill: {style.LIMIT}") == 0


def test_drivers_are_ranked_bars_as_long_as_their_shares():
    """Read back from the SVG: widths stand in the ratio of the shares; no more than a dozen."""
    svg = driver_chart(drivers(), remarks=("±5 %, rate of x1",))
    shown = texts(svg)
    for text in ("C3", "U1 to U3", "42 %", "10 %", "±5 %, rate of x1", "R10"):
        assert text in shown
    assert "R11" not in shown
    boxes = [
        np.array(re.findall(r"-?\d+(?:\.\d+)?", el.get("d")), dtype=float).reshape(-1, 2)
        for el in ET.fromstring(svg).iter()
        if el.tag.endswith("}path") and f"fill: {style.FOUND}" in (el.get("style") or "")
    ]
    widths = [np.ptp(box[:, 0]) for box in boxes]
    assert len(widths) == 12
    assert widths[0] / widths[1] == pytest.approx(0.42 / 0.105, rel=0.01)
    assert widths == sorted(widths, reverse=True)


@pytest.mark.parametrize("tolerance", ["1", "0.071", "0.0071"])
def test_shares_and_remarks_of_drivers_do_not_touch(tolerance):
    """However small the share and long the remark: measured in the face of the plot, columns stand
    apart and within the picture."""
    shares = (0.99994, 0.0994, 0.00899, 0.00089, 0.00004)
    remarks = [f"±{tolerance} %, {'section 2: gain, h1 in'.ljust(LONGEST_REMARK, 'n')}"] * 5
    made = [Driver(refs=("R1",), kind="resistor", share=s) for s in shares]
    svg = driver_chart(made, remarks=remarks)
    found = {"start": [], "end": []}
    for el in ET.fromstring(svg).iter():
        style_of = el.get("style") or ""
        if not el.tag.endswith("}text") or "font-size: 8px" not in style_of:
            continue
        anchor = "end" if "text-anchor: end" in style_of else "start"
        found[anchor].append((float(el.get("x")), "".join(el.itertext())))
    assert [text for _, text in found["end"]] == ["100 %", "9.9 %", "0.90 %", "0.09 %", "<0.01 %"]
    right_of_bars = 547.2 * 0.40
    for (end, share), (start, remark) in zip(found["end"], found["start"], strict=True):
        assert end - width(share, 8) > right_of_bars
        assert end + 4 < start
        assert start + width(remark, 8) < 547.2


@pytest.mark.parametrize(
    ("sets", "expected"),
    [
        ("section 2: frequency, h2 into x2 (x1 part of h2)",) * 2,
        ("one thing + another thing", "one thing + another thing"),
        ("section 2: b2, h2 to y2 (x2 part of h2) + section 2: b1, x2 to y2",
         "section 2: b2, h2 to y2 (x2 part of h2) + 1 more"),
        ("stage g1 for section 12: frequency, h12 into x12 (x11 part of h12)",
         "stage g1 for section 12: frequency, h12 into…"),
        ("x" * 60, "x" * 47 + "…"),
    ],
)  # fmt: skip
def test_a_long_remark_ends_between_things_or_words(sets, expected):
    made = boards.circuit()
    parts = (replace(p, sets=sets) if p.ref == "R1" else p for p in made.passives)
    made = replace(made, passives=tuple(parts))
    (remark,) = driver_remarks([Driver(refs=("R1",), kind="resistor", share=0.5)], made)
    assert remark == f"±1\xa0%, {expected}"


def test_ids_are_unique_over_a_page_and_every_reference_is_met():
    plots = all_plots()
    ids = [i for svg in plots for i in re.findall(r'\sid="([^"]+)"', svg)]
    assert len(set(ids)) == len(ids)
    for svg in plots:
        own = set(re.findall(r'\sid="([^"]+)"', svg))
        used = set(re.findall(r"url\(#([^)]+)\)", svg)) | set(re.findall(r'href="#([^"]+)"', svg))
        assert used and used <= own
        assert svg.startswith("<svg") and "<metadata" not in svg


def test_titles_are_plain_text_whatever_they_hold():
    """No formula is read from dollar signs, no tag from brackets, and no warning comes from a
    character the font lacks."""
    title = "5 $x^$ <b> & 中"
    assert title in texts(bode(title=title))
    assert title in texts(noise_plot(F, np.ones_like(F), title=title))


def test_bad_arrays_are_refused():
    target = TARGETS["PI"].response(F)
    options = {"tolerance": None, "accept": Accept(), "title": ""}
    with pytest.raises(ValueError, match=r"simulated: got shape \(299,\)"):
        bode_plot(F, target, target[1:], **options)
    with pytest.raises(ValueError, match="each above the one before"):
        bode_plot(F[::-1], target, None, **options)
    with pytest.raises(ValueError, match="no voltage for the output net 'out'"):
        step_plot(TIME, {"x1": TIME}, rails=(-1, 1), output_net="out", title="")
    with pytest.raises(ValueError, match="x1: got shape"):
        step_plot(TIME, {"x1": TIME[1:]}, rails=(-1, 1), output_net="x1", title="")
    with pytest.raises(ValueError, match="density: got shape"):
        noise_plot(F, F[1:], title="")
    with pytest.raises(ValueError, match="got no swings"):
        swing_chart(())
    with pytest.raises(ValueError, match="got no drivers"):
        driver_chart(())
    with pytest.raises(ValueError, match="got the prefix '1 x'"):
        prefix_ids("<svg/>", "1 x")


def test_one_frequency_and_constant_voltages_still_make_a_picture():
    one = np.array([10.0])
    accept = Accept()
    bode_plot(one, one + 0j, one + 0j, tolerance=None, accept=accept, title="")
    noise_plot(one, np.array([0.0]), title="")
    step_plot(np.array([0.0]), {"out": np.zeros(1)}, rails=(-1, 1), output_net="out", title="")


def test_equal_arguments_give_equal_bytes_in_any_process_and_under_any_settings():
    here = all_plots()
    assert all_plots() == here
    code = (
        "import matplotlib as mpl; mpl.rcParams['font.size'] = 30; mpl.rcParams['axes.grid'] = 1;"
        "import sys; from tests.netlist.test_plots import all_plots;"
        "sys.stdout.write(''.join(all_plots())); assert 'matplotlib.pyplot' not in sys.modules;"
        "assert mpl.rcParams['font.size'] == 30"
    )
    environment = {**os.environ, "PYTHONHASHSEED": "7", "PYTHONIOENCODING": "utf-8"}
    there = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, check=True, env=environment
    )
    assert there.stdout.decode() == "".join(here)


def test_matplotlib_is_loaded_only_to_draw():
    code = (
        "import sys; import netlist.plots, netlist.blocks;"
        "assert 'matplotlib' not in sys.modules, 'loaded'"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_escaped_text_is_xml():
    assert escape('<a b="c">&\x00\x1b') == "&lt;a b=&quot;c&quot;&gt;&amp;"
