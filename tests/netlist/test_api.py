"""What a script imports: every name is there, and none is loaded before it is used."""

from __future__ import annotations

import subprocess
import sys

import pytest

import netlist
from netlist.pack import write_pack


@pytest.mark.parametrize("name", netlist.__all__)
def test_every_public_name_can_be_had(name):
    assert getattr(netlist, name).__name__ == name
    assert name in dir(netlist)


def test_the_names_are_those_of_their_modules():
    assert netlist.write_pack is write_pack


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="has no attribute 'wrong'"):
        _ = netlist.wrong


def test_importing_the_package_loads_nothing_heavy():
    script = (
        "import sys, netlist; "
        "print([m for m in ('numpy', 'scipy', 'matplotlib', 'pydantic') if m in sys.modules])"
    )
    ended = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert ended.stdout == "[]\n"
