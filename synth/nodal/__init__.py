"""The nodal engine: responses, sensitivities, noise and DC errors of a circuit.

`compile_circuit` turns a `synth.circuit.Circuit` into a `NodalProgram`, which answers for any
number of boards and frequencies.
"""

from synth.nodal.noise import Noise
from synth.nodal.offsets import Offsets
from synth.nodal.program import NodalProgram, compile_circuit
from synth.nodal.sensitivity import Sensitivities

__all__ = ["NodalProgram", "Noise", "Offsets", "Sensitivities", "compile_circuit"]
