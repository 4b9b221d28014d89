"""The benchmark: speed, memory and quality of values, as one table.

``sh tests/run bench`` prints it; ``python -m tests.bench values`` one part alone (parts:
commands, engine, memory, coverage, ranking, values, worst).  Nothing here passes or fails: the
aims stand beside the figures.  Ratios are taken within one run, so that a slow or busy machine
does not blur them.
"""

from __future__ import annotations

import math
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from netlist.processes import workers
from synth.boardruns import ToleranceResult
from synth.candidates import sketch_form
from synth.choosing import choose_values
from synth.design import compare_forms
from synth.evidence import response_error
from synth.forms import FORMS
from synth.grid import judging_frequencies
from synth.job import Accept
from synth.nodal import compile_circuit
from synth.population import PartSpread, Population
from synth.tolerance import run_boards
from synth.transfer import TransferFunction
from synth.worstcase import worst_case
from tests.bench_nodal import bench as bench_engine
from tests.forms import exists
from tests.jobs import capacitor_rule, job_for, resistor_rule
from tests.strategies import butterworth, random_target
from tests.synth.nodal.boards import tow_thomas

__all__ = ["PARTS", "main"]

Row = tuple[str, str, str]

SCENARIOS = Path(__file__).resolve().parent.parent / "scenarios"

# Seeds and forms of the worst case of random targets: Q of 5 to 12 and more.
RANDOM_WORST = ((4000, "cascade"), (4000, "schwarz"), (4001, "tow_thomas"), (4001, "controllable"))

ORDER_8 = """
title = "order 8"
[target]
poles = [
    {frequency = "1 kHz", q = 0.50979558}, {frequency = "1 kHz", q = 0.60134489},
    {frequency = "1 kHz", q = 0.89997622}, {frequency = "1 kHz", q = 2.56291545},
]
gain = 1
[signal]
band = ["100 Hz", "2 kHz"]
"""

BOARDS_IN_A_CHILD = """
import re, sys, time
from pathlib import Path
from netlist.jobfile import read_job
from synth.design import design
moments = {}
def seen(stage, done, total):
    moments[stage] = time.perf_counter(), moments.get(stage, (0, time.perf_counter()))[1]
found = design(read_job(sys.argv[1]), boards=int(sys.argv[2]), progress=seen)
peak = re.search(r"VmHWM:\\s*(\\d+) kB", Path("/proc/self/status").read_text())
took = moments["limits"][1] - moments["boards"][1]
loops = moments["loops"][0] - moments["loops"][1]
print(int(peak[1]) / 1024, found.frequency_hz.size, took, loops)
"""


def commands() -> Iterator[Row]:
    """Whole commands, as a user times them: the median of three runs."""
    command = [sys.executable, "-m", "netlist.cli"]
    yield "polewright --help", _seconds([*command, "--help"], runs=9), "0.2 s"
    with tempfile.TemporaryDirectory() as folder:
        job = Path(folder, "order8.toml")
        job.write_text(ORDER_8, encoding="utf-8")
        for name, path, aim in (
            ("design, order 3 (servo_lead_lag)", SCENARIOS / "servo_lead_lag.toml", "5 s"),
            ("design, order 8", job, "10 s"),
        ):
            into = Path(folder, f"pack-{path.stem}")
            yield name, _seconds([*command, "design", str(path), "--into", str(into)]), aim


def _seconds(command: list[str], runs: int = 3) -> str:
    times = []
    for _ in range(runs):
        start = time.perf_counter()
        subprocess.run(command, check=False, capture_output=True)
        times.append(time.perf_counter() - start)
    return f"{statistics.median(times):.2f} s ({min(times):.2f} to {max(times):.2f})"


def engine() -> Iterator[Row]:
    """The nodal engine against an ngspice in-process alter loop, same circuit, same run."""
    row = bench_engine()
    name = f"{row.op_amps} op-amps, {row.frequencies} frequencies, a board"
    yield f"{name}, ngspice", f"{1e6 * row.ngspice:.0f} us", ""
    yield f"{name}, nodal engine", f"{1e6 * row.engine:.1f} us", ""
    yield "nodal engine faster by", f"{row.ratio:.0f} times", "100 times"
    yield "largest difference of |H|", f"{row.largest_difference:.1e}", "1e-6"


def memory() -> Iterator[Row]:
    """Peak memory of a process that designs and draws many boards, and the time they take."""
    job = SCENARIOS / "servo_lead_lag.toml"
    for boards in (10_000, 100_000, 1_000_000):
        found = subprocess.run(
            [sys.executable, "-c", BOARDS_IN_A_CHILD, str(job), str(boards)],
            check=True,
            capture_output=True,
            text=True,
            env={**os.environ, "PYTHONPATH": str(SCENARIOS.parent)},
        )
        megabytes, frequencies, seconds, loops = found.stdout.split()
        aim = "300 MB" if boards == 1_000_000 else ""
        name = f"peak memory, {boards} boards at {frequencies} frequencies"
        yield name, f"{float(megabytes):.0f} MB", aim
        each = 1e6 * float(seconds) / boards
        yield f"time after the first block, {boards} boards", f"{each:.0f} us a board", ""
        each = 1e6 * float(loops) / boards
        yield f"time of their loops after the first block, {boards} boards", f"{each:.0f} us", ""


# Of the coverage: runs, boards of each, and boards of the run that stands for the truth, whose
# own error is a thirtieth of that of a run.
COVERAGE_RUNS = 200
COVERAGE_BOARDS = 1_000
REFERENCE_BOARDS = 1_000_000


def coverage() -> Iterator[Row]:
    """How often the printed interval of the yield holds the yield of a million other boards."""
    plain, lots = Population(), PartSpread(distribution="normal", lot=0.5)
    for name, population, limit in (
        ("uniform", plain, 0.5),
        ("uniform, few fail", plain, 0.8),
        ("normal, capacitors of one lot", Population(capacitors=lots), 0.6),
    ):
        truth = _run(population, limit, boards=REFERENCE_BOARDS, seed=COVERAGE_RUNS).share
        runs = [
            _run(population, limit, boards=COVERAGE_BOARDS, seed=k) for k in range(COVERAGE_RUNS)
        ]
        held = sum(r.low <= truth <= r.high for r in runs)
        yield (
            f"{name}: yield {100 * truth:.2f} %",
            f"{held} of {COVERAGE_RUNS} intervals of {COVERAGE_BOARDS} boards hold it: "
            f"{100 * held / COVERAGE_RUNS:.1f} %",
            "95 %",
        )


def _run(population: Population, limit_db: float, *, boards: int, seed: int) -> ToleranceResult:
    """Boards of a two-integrator loop."""
    circuit, band = tow_thomas(), np.geomspace(1e3, 30e3, 21)
    program = compile_circuit(circuit)
    accept = Accept(magnitude_db=limit_db, phase_deg=20.0)
    return run_boards(
        program,
        circuit,
        program.solve(band),
        band,
        accept=accept,
        boards=boards,
        seed=seed,
        population=population,
    )


# What is aimed at in the choice of values, rms of ln H [%], with E6 capacitors: the goal of a
# series, and by order what a rough trial in plain numpy reached on the companion form.
GOALS = {"E96": 0.02, "E24": 0.2}
TRIAL = {
    "E96": {2: 0.013, 3: 0.17, 4: 0.33, 6: 0.22},
    "E24": {2: 0.038, 3: 0.17, 4: 0.87, 6: 1.38},
}


def values() -> Iterator[Row]:
    """Nominal rms error of ln H against nearest rounding: Butterworth at 1 kHz, 100 Hz to
    2 kHz, 100 points a decade, 1 k to 1 M, capacitors E6 and E12; no choice is below the bound,
    in the linear model about the chosen values."""
    frequency = np.geomspace(100.0, 2e3, 131)
    for capacitors in ("E6", "E12"):
        for series in ("E96", "E24"):
            for order in (2, 3, 4, 6):
                forms = [f for f in FORMS if exists(f, butterworth(order, 1e3))]
                found = [_Chosen.of(order, series, capacitors, f, frequency) for f in forms]
                for one in found:
                    yield one.row
                if capacitors == "E6":
                    yield _best_row(min(found, key=lambda c: c.rms), TRIAL[series][order])


def worst() -> Iterator[Row]:
    """The worst case within tolerance: time, and how much the bound is above what is reached;
    resistors 1 %, capacitors 5 %: Butterworth at 1 kHz, 100 Hz to 2 kHz, and random targets of
    order 4 with Q up to 20."""
    band = (100.0, 2e3)
    for order in (2, 3, 4, 6):
        for form in ("cascade", "controllable"):
            yield from _worst_rows(f"order {order}, {form}", butterworth(order, 1e3), band, form)
    for seed, form in RANDOM_WORST:
        target = random_target(np.random.default_rng(seed), 4, decades=1.5, from_hz=100.0)
        name = f"random {seed}, order 4, Q {target.largest_q:.0f}, {form}"
        yield from _worst_rows(name, target, (50.0, 5e3), form)


def _worst_rows(
    name: str, target: TransferFunction, band: tuple[float, float], form: str
) -> Iterator[Row]:
    frequency = judging_frequencies(target, band)
    circuit = sketch_form(job_for(target, band), form, frequency).circuit
    start = time.process_time()
    found = worst_case(circuit, target.response(frequency), frequency, target=target)
    seconds = time.process_time() - start
    aimed = target.order <= 4
    yield f"worst case, {name}: time", f"{seconds:.2f} s", "10 s" if target.order == 4 else ""
    for error in (found.magnitude_db, found.phase_deg):
        over = ", ".join(
            f"{where} none" if bound is None else f"{where} {bound / error.reached - 1:.1%}"
            for where, bound in (("judged", error.bound), ("whole band", error.everywhere))
        )
        over = f"no limit, a {error.unlimited}" if error.unlimited else over
        yield f"  bound over {error.reached:.3g} {error.unit}", over, "5 %" if aimed else ""


@dataclass(frozen=True, kw_only=True)
class _Chosen:
    """One choice of values: errors in percent, time in seconds."""

    name: str
    series: str
    form: str
    rms: float
    nearest: float
    lower_bound: float
    gap: float
    proven: bool
    seconds: float

    @classmethod
    def of(
        cls, order: int, series: str, capacitors: str, form: str, frequency: np.ndarray
    ) -> _Chosen:
        target = butterworth(order, 1e3)
        response = target.response(frequency)
        job = job_for(
            target,
            (100.0, 2e3),
            form=form,
            resistors=resistor_rule(series),
            capacitors=capacitor_rule(capacitors),
        )
        circuit = sketch_form(job, form, frequency).circuit
        start = time.perf_counter()
        choice = choose_values(circuit, target=response, frequency_hz=frequency)
        took = time.perf_counter() - start
        chosen, nearest = (
            100 * response_error(compile_circuit(c).solve(frequency), response).rms
            for c in (choice.circuit, choice.nearest)
        )
        known = choice.certificate
        return cls(
            name=f"order {order}, {series}, {capacitors}",
            series=series,
            form=form,
            rms=chosen,
            nearest=nearest,
            lower_bound=100 * known.lower_bound,
            gap=known.gap,
            proven=known.proven,
            seconds=took,
        )

    @property
    def row(self) -> Row:
        """Error, that of nearest rounding, their ratio, the bound, the gap to it, the time."""
        gap = "proven" if self.proven else f"gap {100 * self.gap:.0f} %"
        return (
            f"{self.name}, {self.form}",
            f"{self.rms:.4f} % of {self.nearest:.3f} %: ratio {self.rms / self.nearest:.3f}, "
            f"bound {self.lower_bound:.4f} %, {gap}, {self.seconds:.1f} s",
            "ratio 0.2",
        )


def _best_row(best: _Chosen, trial: float) -> Row:
    """The best form of an order against the larger of goal and trial."""
    goal = GOALS[best.series]
    met = [name for name, aim in (("goal", goal), ("trial", trial)) if best.rms <= aim]
    verdict = " and ".join(met) + " met" if met else "neither met"
    return (
        f"{best.name}: best form, {best.form}",
        f"{best.rms:.4f} %, bound {best.lower_bound:.4f} %: {verdict}",
        f"goal {goal} %, trial {trial} %",
    )


def ranking() -> Iterator[Row]:
    """The whole ranking of a low-pass, every form with values and 1,000 boards, by order."""
    seconds: dict[int, float] = {}
    for order in (4, 6, 8, 10):
        job = job_for(butterworth(order, 1e3), (100.0, 2e3))
        start = time.perf_counter()
        with workers() as mapper:
            chosen, candidates = compare_forms(job, mapper=mapper)
        seconds[order] = time.perf_counter() - start
        count = sum(c.possible for c in candidates)
        aim = "15 s" if order == 6 else ""
        yield f"order {order}", f"{seconds[order]:.1f} s for {count} forms, {chosen}", aim
    growth = math.log(seconds[10] / seconds[4]) / math.log(10 / 4)
    yield "growth from order 4 to 10, a power of the order", f"{growth:.2f}", "2"


PARTS: Mapping[str, Callable[[], Iterator[Row]]] = {
    "commands": commands,
    "engine": engine,
    "memory": memory,
    "coverage": coverage,
    "ranking": ranking,
    "values": values,
    "worst": worst,
}


def main(chosen: list[str]) -> int:
    """Print the parts named, or all; returns the exit code."""
    unknown = [name for name in chosen if name not in PARTS]
    if unknown:
        sys.stderr.write(f"got {unknown[0]!r}, expected {', '.join(PARTS)}\n")
        return 2
    for name in chosen or PARTS:
        first = (PARTS[name].__doc__ or "").strip().splitlines()[0]
        sys.stdout.write(f"\n{name}: {first}\n")
        for label, figure, aim in PARTS[name]():
            sys.stdout.write(f"  {label:52s} {figure:72s} {'aim ' + aim if aim else ''}\n")
            sys.stdout.flush()
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
