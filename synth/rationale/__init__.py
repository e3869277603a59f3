"""Why a candidate stands where it stands: facts first, sentences last, every number in a record."""

from synth.rationale import cautions
from synth.rationale.cautions import uncounted
from synth.rationale.facts import Fact
from synth.rationale.practice import remarks
from synth.rationale.revision import GIVEN, Decision, decide
from synth.rationale.scene import Scene, worst_of
from synth.rationale.sentences import rationale
from synth.rationale.statement import Said, verdict

__all__ = [
    "GIVEN",
    "Decision",
    "Fact",
    "Said",
    "Scene",
    "cautions",
    "decide",
    "rationale",
    "remarks",
    "uncounted",
    "verdict",
    "worst_of",
]
