"""The ways of stating H(s), and what is accepted of them.

Each way is one file and gives a `TransferFunction`; `accept` then refuses what cannot be built,
cancels what coincides, and says what its author should know.
"""

from synth.targets.acceptance import accept
from synth.targets.coefficients import from_coefficients
from synth.targets.expression import from_expression
from synth.targets.roots import Root, from_roots

__all__ = ["Root", "accept", "from_coefficients", "from_expression", "from_roots"]
