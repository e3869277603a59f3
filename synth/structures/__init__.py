"""Compensator structures, one module a family."""

from synth.structures.family import SETTING_UNITS, Parameter, Ratio, Structure
from synth.structures.registry import REGISTRY, by_name, same_function

__all__ = ["REGISTRY", "SETTING_UNITS", "Parameter", "Ratio", "Structure", "by_name", "same_function"]
