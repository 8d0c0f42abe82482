"""Everything that draws: one file per kind of picture, one style for all.

Functions take arrays and a grid and give a matplotlib figure; `save` writes it.
"""

from recon.figures.depth_stack import depth_stack
from recon.figures.displayed import Display
from recon.figures.fitted_spectrum import fitted_spectrum
from recon.figures.history import Progress, history
from recon.figures.label_maps import label_maps
from recon.figures.maps import comparison, overview
from recon.figures.protocol_coverage import coverage
from recon.figures.sensitivity import sensitivity
from recon.figures.spectrum import spectrum
from recon.figures.style import save
from recon.figures.sweep import sweep
from recon.figures.verdicts import Verdict, verdicts

__all__ = [
    "Display",
    "Progress",
    "Verdict",
    "comparison",
    "coverage",
    "depth_stack",
    "fitted_spectrum",
    "history",
    "label_maps",
    "overview",
    "save",
    "sensitivity",
    "spectrum",
    "sweep",
    "verdicts",
]
