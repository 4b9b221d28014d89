"""The keys of a job file that say from what population the parts of the boards come.

They stand with the parts they concern, ``[board.resistors]``, ``[board.capacitors]`` and
``[board.op_amp]``, in ``board.temperature`` and in ``[[board.networks]]``; here they become one
`Population`.
"""

from __future__ import annotations

from functools import partial
from typing import TYPE_CHECKING, Any

from synth.population import Network, PartSpread, Population

if TYPE_CHECKING:
    from netlist.jobschema import BoardTable, Table
    from netlist.mistakes import Mistakes

__all__ = ["purchase_keys", "read_population"]

_SPREAD = ("distribution", "lot", "temperature_coefficient")
_POPULATION = (*_SPREAD, "gain_bandwidth_spread")


def purchase_keys(table: Table) -> dict[str, Any]:
    """What a table of parts states of what is bought, without what it says of its spread."""
    return {key: value for key, value in table.given().items() if key not in _POPULATION}


def read_population(table: BoardTable, mistakes: Mistakes) -> Population | None:
    """The population a board states, or None with the mistakes noted."""
    spreads = [
        mistakes.attempt(f"board.{name}", partial(_spread, kind))
        for name, kind in (("resistors", table.resistors), ("capacitors", table.capacitors))
    ]
    networks = [
        mistakes.attempt(f"board.networks[{number}]", partial(Network, **network.given()))
        for number, network in enumerate(table.networks, start=1)
    ]
    resistors, capacitors = spreads
    if resistors is None or capacitors is None or None in networks:
        return None
    return mistakes.attempt(
        "board",
        lambda: Population(
            resistors=resistors,
            capacitors=capacitors,
            networks=tuple(n for n in networks if n is not None),
            temperature=table.temperature,
            gain_bandwidth_spread=table.op_amp.gain_bandwidth_spread or 0.0,
        ),
    )


def _spread(table: Table) -> PartSpread:
    given = table.given()
    return PartSpread(**{key: given[key] for key in _SPREAD if key in given})
