"""What no compensator can do on a plant, each limit with its source."""

from synth.limits.assess import Limit, assess

__all__ = ["Limit", "assess"]
