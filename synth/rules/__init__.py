"""Published starting settings, one file a school."""

from synth.rules.collect import starts
from synth.rules.start import Start

__all__ = ["Start", "starts"]
