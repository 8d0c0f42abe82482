"""Proton spectra from shifts and couplings, exact at any field.

Read in this order: `system` (the spins), `composite` (equivalent spins joined), `transitions`
(diagonalisation block by block), `lines` (line lists and time signals).
"""

from recon.physics.spins.lines import LineList, line_list, time_signal
from recon.physics.spins.system import SpinSystem, symmetric_couplings

__all__ = ["LineList", "SpinSystem", "line_list", "symmetric_couplings", "time_signal"]
