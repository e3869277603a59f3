"""Requirements: bounds, slack, what binds."""

from synth.requirements.bounds import Bound, numbered
from synth.requirements.slack import TIE, Scorecard, judged, order, slack_of, slacks

__all__ = ["TIE", "Bound", "Scorecard", "judged", "numbered", "order", "slack_of", "slacks"]
