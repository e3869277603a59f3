"""Plants: every way of writing one, its cases, its character."""

from synth.model.cases import ParameterRange, PlantCase, PlantCases, case_points
from synth.model.character import Character, character_of, characters
from synth.model.forms import FormError, PlantForm
from synth.model.formula import Formula, FormulaError, parse
from synth.model.plant import Plant

__all__ = [
    "Character",
    "FormError",
    "Formula",
    "FormulaError",
    "ParameterRange",
    "Plant",
    "PlantCase",
    "PlantCases",
    "PlantForm",
    "case_points",
    "character_of",
    "characters",
    "parse",
]
