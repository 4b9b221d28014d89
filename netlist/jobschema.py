"""The tables of a job file and their keys, as pydantic models.

One model is one table.  A key that may be left out is None here; its default is that of the
value type of `synth.job` it fills, or stands in `netlist.jobfile`.  What several keys must
satisfy together is checked by those value types.  Importing this module imports pydantic, so
`netlist.jobfile` does it only when a job is read.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from fractions import Fraction
from typing import Annotated, Any, get_args

from pydantic import BaseModel, ConfigDict, Field, PlainValidator, model_validator

from netlist import jobvalues
from netlist.jobvalues import RootEntry, read_quantity
from synth.errors import JobError

__all__ = [
    "AcceptTable",
    "BoardTable",
    "JobTable",
    "LoopTable",
    "NetworkTable",
    "OpAmpTable",
    "SignalTable",
    "Table",
    "TargetTable",
    "keys_of",
]

Text = Annotated[str | None, PlainValidator(jobvalues.read_text)]
FileName = Annotated[str | None, PlainValidator(jobvalues.read_file_name)]
Volt = Annotated[float | None, PlainValidator(read_quantity("V"))]
Ohm = Annotated[float | None, PlainValidator(read_quantity("ohm"))]
Farad = Annotated[float | None, PlainValidator(read_quantity("F"))]
Ampere = Annotated[float | None, PlainValidator(read_quantity("A"))]
Second = Annotated[float | None, PlainValidator(read_quantity("s"))]
Hertz = Annotated[float | None, PlainValidator(read_quantity("Hz"))]
Decibel = Annotated[float | None, PlainValidator(read_quantity("dB"))]
Degree = Annotated[float | None, PlainValidator(read_quantity("deg"))]
Share = Annotated[float | None, PlainValidator(read_quantity("%"))]
VoltPerSecond = Annotated[float | None, PlainValidator(read_quantity("V/s"))]
VoltNoise = Annotated[float | None, PlainValidator(read_quantity("V/rtHz"))]
AmpereNoise = Annotated[float | None, PlainValidator(read_quantity("A/rtHz"))]
Ratio = Annotated[float | None, PlainValidator(read_quantity("ratio"))]
PerKelvin = Annotated[float | None, PlainValidator(read_quantity("ppm/K"))]
Temperatures = Annotated[tuple[float, float] | None, PlainValidator(jobvalues.read_temperatures)]
References = Annotated[tuple[str, ...], PlainValidator(jobvalues.read_references)]
Band = Annotated[tuple[float, float], PlainValidator(jobvalues.read_band)]
Texts = Annotated[tuple[str, ...] | None, PlainValidator(jobvalues.read_texts)]
Rails = Annotated[tuple[float, float] | None, PlainValidator(jobvalues.read_rails)]
Coefficients = Annotated[tuple[Fraction, ...], PlainValidator(jobvalues.read_coefficients)]
Roots = Annotated[tuple[RootEntry, ...], PlainValidator(jobvalues.read_roots)]


class Table(BaseModel):
    """A table whose keys are all known."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)

    def given(self) -> dict[str, Any]:
        """The values that were stated, by the name of their field."""
        return {name: getattr(self, name) for name in self.model_fields_set}


class TargetTable(Table):
    """H(s), stated in exactly one way."""

    allow_unstable: Annotated[bool, PlainValidator(jobvalues.read_switch)] = False
    numerator: Coefficients = ()
    denominator: Coefficients = ()
    zeros: Roots = ()
    poles: Roots = ()
    gain: Annotated[Fraction, PlainValidator(jobvalues.read_gain)] = Fraction(1)
    gain_at: Annotated[Fraction | str, PlainValidator(jobvalues.read_gain_at)] = "dc"
    expression: Annotated[str, PlainValidator(jobvalues.read_expression)] = ""
    parameters: Annotated[
        Mapping[str, Fraction | str], PlainValidator(jobvalues.read_parameters)
    ] = Field(default_factory=dict)

    @property
    def way(self) -> str:
        """``"coefficients"``, ``"roots"`` or ``"expression"``."""
        return next(w for w, keys in _WAYS.items() if self.model_fields_set & keys.keys())

    @model_validator(mode="after")
    def _states_one_way(self) -> TargetTable:
        stated = {
            way: [k for k in keys if k in self.model_fields_set] for way, keys in _WAYS.items()
        }
        used = {way: keys for way, keys in stated.items() if keys}
        if not used:
            raise JobError(f"got no H(s), expected {_ONE_WAY}")
        if len(used) > 1:
            mixed = " with ".join(keys[0] for keys in used.values())
            raise JobError(f"got {mixed}, expected exactly one way: {_ONE_WAY}")
        ((way, keys),) = used.items()
        absent = [k for k, required in _WAYS[way].items() if required and k not in keys]
        if absent:
            raise JobError(f"got {keys[0]} without {absent[0]}, expected both")
        return self


# The ways of stating H(s): their keys, and which of them each must have.
_WAYS: Mapping[str, Mapping[str, bool]] = {
    "coefficients": {"numerator": True, "denominator": True},
    "roots": {"zeros": False, "poles": True, "gain": True, "gain_at": False},
    "expression": {"expression": True, "parameters": False},
}
_ONE_WAY = "numerator and denominator, or zeros, poles and gain, or expression"


class SignalTable(Table):
    """The signal the board sees."""

    band_hz: Band = Field(alias="band", description="two frequencies such as ['1 Hz', '20 kHz']")
    input_peak: Volt = None
    swing: Text = None
    source_resistance: Ohm = None
    load: Ohm = None


class ResistorTable(Table):
    """Which resistors may be bought."""

    series: Text = None
    tolerance: Share = None
    smallest: Ohm = None
    largest: Ohm = None
    distribution: Text = None
    lot: Share = None
    temperature_coefficient: PerKelvin = None


class CapacitorTable(Table):
    """Which capacitors may be bought."""

    series: Text = None
    tolerance: Share = None
    smallest: Farad = None
    largest: Farad = None
    distribution: Text = None
    lot: Share = None
    temperature_coefficient: PerKelvin = None


class OpAmpTable(Table):
    """A class of op-amp, and the figures that differ from it."""

    kind: Text = None
    gain_bandwidth: Hertz = None
    gain_bandwidth_spread: Share = None
    slew_rate: VoltPerSecond = None
    open_loop_gain: Ratio = None
    offset: Volt = None
    bias_current: Ampere = None
    voltage_noise: VoltNoise = None
    current_noise: AmpereNoise = None
    swing_headroom: Volt = None
    output_current: Ampere = None
    supply_current: Ampere = None
    model: FileName = None
    subcircuit: Text = None
    pins: Texts = None


class NetworkTable(Table):
    """Parts that are matched."""

    refs: References = Field(description="a list of references such as ['R3', 'R4']")
    tolerance: Annotated[float, PlainValidator(read_quantity("%"))] = Field(
        description="the tolerance of the ratio of any two of the parts, such as '0.1 %'"
    )
    tracking: PerKelvin = None


class BoardTable(Table):
    """What the board is built from."""

    supply: Rails = None
    form: Text = None
    inverted: Text = None
    stock: FileName = None
    fixed: Annotated[Mapping[str, object], PlainValidator(jobvalues.read_table)] = Field(
        default_factory=dict
    )
    share_values: Annotated[bool, PlainValidator(jobvalues.read_switch)] = False
    pairs: Annotated[bool, PlainValidator(jobvalues.read_switch)] = False
    resistors: ResistorTable = ResistorTable()
    capacitors: CapacitorTable = CapacitorTable()
    op_amp: OpAmpTable = OpAmpTable()
    temperature: Temperatures = None
    networks: list[NetworkTable] = Field(default_factory=list)


class AcceptTable(Table):
    """The limits."""

    magnitude_db: Decibel = Field(default=None, alias="magnitude")
    phase_deg: Degree = Field(default=None, alias="phase")
    yield_share: Share = Field(default=None, alias="yield")


class LoopTable(Table):
    """The plant, and the margins of the loop."""

    numerator: Coefficients = Field(description="a list of coefficients, descending powers of s")
    denominator: Coefficients = Field(description="a list of coefficients, descending powers of s")
    delay: Second = None
    phase_margin_deg: Degree = Field(default=None, alias="phase_margin")
    gain_margin_db: Decibel = Field(default=None, alias="gain_margin")


class JobTable(Table):
    """The whole file."""

    title: Text = None
    target: TargetTable = Field(description="a table [target] that states H(s)")
    signal: SignalTable = Field(description="a table [signal] with band = ['1 Hz', '20 kHz']")
    board: BoardTable = BoardTable()
    accept: AcceptTable = AcceptTable()
    loop: LoopTable | None = None


def keys_of(
    table: type[Table], path: tuple[str, ...] = ()
) -> Iterator[tuple[tuple[str, ...], str]]:
    """Every key path below `table`, with what is expected there if it must be present."""
    for name, info in table.model_fields.items():
        here = (*path, info.alias or name)
        yield here, info.description or ""
        for kind in (info.annotation, *get_args(info.annotation)):
            if isinstance(kind, type) and issubclass(kind, Table):
                yield from keys_of(kind, here)
