"""A record in, a terminal out."""

from synth.report.comparison import comparison
from synth.report.faults import faults
from synth.report.page import one_candidate, page
from synth.report.plant import plant
from synth.report.theme import console

__all__ = ["comparison", "console", "faults", "one_candidate", "page", "plant"]
