"""A second opinion on the final candidates, by other algorithms than the core's."""

from synth.verify.second_opinion import Verified, second_opinion, together

__all__ = ["Verified", "second_opinion", "together"]
