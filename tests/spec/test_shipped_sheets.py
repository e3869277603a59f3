"""The shipped sheets: each reads and says that it is invented; between them they use what a sheet can say."""

import tomllib
from pathlib import Path

import pytest

from synth.model.forms import CoefficientForm, FormulaForm, MatrixForm, RootForm
from synth.spec import read_spec

FOLDER = Path(__file__).parents[2] / "specs"
SHEETS = sorted(FOLDER.glob("*.toml"))


@pytest.mark.parametrize("path", SHEETS, ids=lambda p: p.stem)
def test_it_reads_and_is_marked_invented(path):
    spec = read_spec(path)
    assert "invented" in spec.title
    assert spec.text.startswith("# Invented for this project")
    assert spec.bounds


def test_a_sheet_for_every_field():
    assert {p.stem for p in SHEETS} >= {
        "positioning_servo", "pitch_rate", "curing_oven", "buck_converter", "levitation", "flexible_drive",
        "boiler_level", "dough_cooler", "impossible_level", "roll_drive_a", "roll_drive_b",
    }  # fmt: skip


def test_between_them_they_use_every_form_and_option():
    specs = [read_spec(p) for p in SHEETS]
    assert {type(s.form) for s in specs} == {FormulaForm, CoefficientForm, RootForm, MatrixForm}
    texts = [tomllib.loads(s.text) for s in specs]
    bounds = [
        b for t in texts for v in t["requirements"].values() for b in (v if isinstance(v, list) else [v])
    ]
    assert {key for b in bounds for key in b} >= {"min", "max", "band", "below", "span"}
    assert {key for t in texts for key in t} >= {"plant", "parameters", "cases", "reference", "prefer"}
    assert any(isinstance(v, list) for t in texts for v in t["requirements"].values())
    assert any(
        s.cases.rational.numerator[0, -1] < 0 and not any(s.cases.rational.denominator[0] < 0) for s in specs
    )


def test_the_pair_differs_in_the_plant_alone():
    a, b = (read_spec(FOLDER / f"roll_drive_{r}.toml") for r in "ab")
    assert (a.revision, b.revision) == ("A", "B")
    assert (a.title, a.bounds, a.reference_step, a.valid_to) == (
        b.title,
        b.bounds,
        b.reference_step,
        b.valid_to,
    )
    old, new = a.cases.cases[0].parameters, b.cases.cases[0].parameters
    assert {name for name in old if old[name] != new[name]} == {"J", "theta"}
