"""The run of boards, ready for the page: what it assumes, which limit fails first, and which
parts drive it."""

from __future__ import annotations

from collections.abc import Iterable

from netlist.report.wording import listed, quantity, stated
from synth.boardruns import Driver, LimitFailures, ToleranceResult
from synth.circuit import Circuit
from synth.job import Job
from synth.population import Network, PartSpread, Population
from synth.results import Design

__all__ = ["assumptions", "driver_remarks", "failure_lines", "left_out", "population_rows", "shown"]

# References of a network are listed up to this many.
MOST_NAMED = 6

# Fewer boards than this have no tenths worth telling.
FEW_BOARDS = 20

# How much of what a part sets stands beside its bar, in characters.
LONGEST_REMARK = 48


def assumptions(population: Population) -> list[str]:
    """What the boards are drawn from, in sentences."""
    if population.is_plain:
        return ["Each part is drawn on its own, uniformly within its tolerance."]
    resistors, capacitors = population.resistors, population.capacitors
    lines = []
    if resistors.distribution == capacitors.distribution:
        lines.append(f"Parts are drawn {_distribution(resistors)}.")
    else:
        lines.append(
            f"Resistors are drawn {_distribution(resistors)}, capacitors "
            f"{_distribution(capacitors)}."
        )
    lines += [
        f"{kind} of the same value and tolerance come from one reel: up to "
        f"{stated(spread.lot, '%')} of the tolerance is an offset that they share, uniform, and "
        "what is left is each part's own."
        for kind, spread in (("Resistors", resistors), ("Capacitors", capacitors))
        if spread.lot
    ]
    lines += [
        _network(network, hot=bool(population.temperature)) for network in population.networks
    ]
    lines += _warmth(population)
    if population.gain_bandwidth_spread:
        lines.append(
            "The gain-bandwidth of op-amps is uniform within "
            f"±{stated(population.gain_bandwidth_spread, '%')} of its figure, the same for all "
            "op-amps of one package."
        )
    return lines


def left_out(population: Population) -> str:
    """What the run does not cover, in one sentence."""
    absent = [] if population.temperature else ["temperature"]
    absent.append("ageing")
    if not population.gain_bandwidth_spread:
        absent.append("the spread of op-amps")
    return f"{listed(absent).capitalize()} {'come' if len(absent) > 1 else 'comes'} on top."


def failure_lines(run: ToleranceResult) -> list[str]:
    """Which limit fails first, and where, in sentences."""
    found = run.failures
    oscillating = []
    if run.unstable:
        oscillating = [
            f"{_boards(run.unstable)} {'oscillates' if run.unstable == 1 else 'oscillate'} by "
            f"{'itself' if run.unstable == 1 else 'themselves'}: poles lie right of the axis."
        ]
    if found is None:
        return oscillating
    if not found.boards:
        return [*oscillating, "No board misses a limit."]
    first = [_first(f, found.boards) for f in found.first if f.boards]
    line = f"{_boards(found.boards)} {_s('miss', found.boards)} a limit. {' '.join(first)}"
    if found.both:
        line += f" {_boards(found.both)} {'is' if found.both == 1 else 'are'} beyond both."
    return [*oscillating, line]


def driver_remarks(drivers: Iterable[Driver], circuit: Circuit) -> list[str]:
    """What stands beside the bar of each driver: its tolerance and what it sets."""
    remarks = []
    for driver in drivers:
        if driver.kind == "op_amp":
            remarks.append("gain-bandwidth")
            continue
        part = circuit.by_ref[driver.refs[0]]
        words = _shortened(part.sets)
        remarks.append(f"±{stated(part.tolerance, '%')}{', ' if words else ''}{words}")
    return remarks


def _shortened(sets: str) -> str:
    """What a part sets, of several things as many as fit, never a piece of a word."""
    things = sets.split(" + ")
    for count in range(len(things), 0, -1):
        more = f" + {len(things) - count} more" if count < len(things) else ""
        text = " + ".join(things[:count]) + more
        if len(text) <= LONGEST_REMARK:
            return text
    kept = things[0]
    while len(kept) >= LONGEST_REMARK and " " in kept:
        kept = kept.rpartition(" ")[0]
    if kept.count("(") > kept.count(")"):
        kept = kept.rpartition("(")[0]
    return kept[: LONGEST_REMARK - 1].rstrip(" ,(+") + "…"


def population_rows(job: Job) -> list[tuple[str, str]]:
    """What the job states of the population, as requirements; nothing where it states nothing."""
    population = job.board.population
    rows = []
    if population.temperature is not None:
        low, high = population.temperature
        rows.append(("temperature", f"{_celsius(low)} to {_celsius(high)}"))
    rows += [
        ("matched", f"{listed(n.refs)}: ratio within {stated(n.tolerance, '%')}")
        for n in population.networks
    ]
    if not population.is_plain:
        rows.append(("boards are drawn from", "see the spread over boards"))
    return rows


def shown(design: Design) -> dict[str, object]:
    """Everything the page says of the run beside its counts."""
    run, population = design.tolerance, design.job.board.population
    failing = run.failures is not None and run.failures.boards > 0
    moving = bool(population.networks or population.resistors.lot or population.capacitors.lot)
    return {
        "assumptions": assumptions(population),
        "left_out": left_out(population),
        "failures": failure_lines(run),
        "where": "where boards fail" if failing else "where boards come closest to a limit",
        "overlap": moving,
        "is_plain": population.is_plain,
    }


def _distribution(spread: PartSpread) -> str:
    if spread.distribution == "normal":
        return (
            "from a normal distribution whose three standard deviations are the tolerance, where "
            "it is cut"
        )
    return "uniformly within the tolerance"


def _network(network: Network, *, hot: bool) -> str:
    line = (
        f"{_named(network.refs)} are matched: the ratio of any two is within "
        f"{stated(network.tolerance, '%')} of its nominal one, beside a deviation they share "
        "within their tolerance"
    )
    if hot and network.tracking is not None:
        line += (
            f"; their temperature coefficients differ by at most {_per_kelvin(network.tracking)}"
        )
    return f"{line}."


def _warmth(population: Population) -> list[str]:
    if population.temperature is None:
        return []
    low, high = population.temperature
    stated_ones = [
        f"±{_per_kelvin(spread.temperature_coefficient)} for {kind}"
        for kind, spread in (
            ("resistors", population.resistors),
            ("capacitors", population.capacitors),
        )
        if spread.temperature_coefficient
    ]
    line = f"Each board has one temperature, uniform from {_celsius(low)} to {_celsius(high)}"
    if stated_ones:
        line += (
            "; the temperature coefficient of each part, about 25 °C, is uniform within "
            f"{listed(stated_ones)}"
        )
    return [f"{line}."]


def _first(found: LimitFailures, failing: int) -> str:
    """Where boards fail at one limit."""
    share = "All" if found.boards == failing else f"{found.boards} of them"
    text = f"{share} by the {found.quantity} first"
    low, middle, high = (
        quantity(f, "Hz", 4) for f in (found.low_hz, found.frequency_hz, found.high_hz)
    )
    if low == high:
        return f"{text}, at {middle}."
    if found.boards < FEW_BOARDS:
        return f"{text}, most of them from {low} to {high}."
    return f"{text}, half of them below {middle}, nine of ten from {low} to {high}."


def _boards(count: int) -> str:
    return f"{count} board{'' if count == 1 else 's'}"


def _s(verb: str, count: int) -> str:
    return f"{verb}es" if count == 1 else verb


def _celsius(value: float) -> str:
    return f"{value:g}\N{NO-BREAK SPACE}°C".replace("-", "−")


def _per_kelvin(value: float) -> str:
    return f"{value * 1e6:.4g}\N{NO-BREAK SPACE}ppm/K"


def _named(refs: tuple[str, ...]) -> str:
    if len(refs) <= MOST_NAMED:
        return listed(refs)
    return f"{listed((*refs[:MOST_NAMED], f'{len(refs) - MOST_NAMED} more'))}"
