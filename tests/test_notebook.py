"""The package as a library: three lines, a table that shows itself, errors that help, and a quick import."""

import io
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest

import synth


@pytest.fixture(scope="module")
def table():
    plant = synth.Plant.from_formula("2/(s*(0.1*s + 1))")
    return synth.evaluate(plant, numerator=[[1.0], [2.0], [4.0]], denominator=[[1.0]])


def test_shapes_names_and_units(table):
    assert table.values.shape == (3, 1, len(table.names))
    assert table.stable.shape == (3, 1)
    assert table["overshoot"].shape == (3, 1)
    assert table.units["settling_time"] == "s"
    assert table.units["damping_ratio"] == ""
    np.testing.assert_allclose(table["velocity_error"][:, 0], [0.5, 0.25, 0.125], rtol=1e-12)


def test_plants_of_different_orders_in_one_call():
    plants = [
        synth.Plant.from_coefficients([1.0], [1.0, 1.0]),
        synth.Plant.from_coefficients([1.0], [1.0, 2.0, 1.0]),
    ]
    asked = ["final_value", synth.Measure("settling_time", band=0.05)]
    found = synth.evaluate(plants, [3.0], [1.0], quantities=asked)
    assert found.plants == ("P1", "P2")
    np.testing.assert_allclose(found["final_value"], [[0.75, 0.75]], rtol=1e-13)
    assert found["settling_time"][0, 0] == pytest.approx(np.log(20.0) / 4.0, rel=1e-9)
    assert "settling time, band 0.05" in str(found)


def test_plain_text(table):
    lines = str(table).splitlines()
    assert lines[0].split() == ["quantity", "unit", "C1", "C2", "C3"]
    row = next(line for line in lines if line.startswith("velocity error"))
    assert row.split()[2:] == ["s", "0.5", "0.25", "0.125"]
    assert repr(table) == str(table)


def test_rich_display(table):
    from rich.console import Console

    console = Console(width=100, file=io.StringIO())
    console.print(table)
    text = console.file.getvalue()
    assert "phase margin" in text
    assert "deg" in text


def test_html_display(table):
    text = table._repr_html_()
    assert text.startswith("<table>")
    assert text.count("<tr>") == len(table.names) + 2
    assert "<th>C3</th>" in text


def test_many_loops_show_a_few_and_say_how_many_more():
    plant = synth.Plant.from_coefficients([1.0], [1.0, 1.0])
    found = synth.evaluate(plant, np.ones((20, 1)), [1.0], quantities=["final_value"])
    assert str(found).endswith("14 more loops in .values")
    assert "14 more loops" in found._repr_html_()
    assert found.values.shape == (20, 1, 1)


def test_an_unstable_loop_shows_what_it_has():
    found = synth.evaluate(synth.Plant.from_coefficients([1.0], [1.0, -1.0]), [0.5], quantities=["overshoot"])
    assert not found.stable[0, 0]
    assert str(found).splitlines()[1].split() == ["stable", "no"]
    assert str(found).splitlines()[2].split() == ["overshoot", "%", "-"]


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda p: synth.evaluate(p, [1.0], [1.0], quantities=["overshot"]), "nearest is 'overshoot'"),
        (lambda p: synth.evaluate(p, [1.0, 0.0], [1.0]), "proper"),
        (lambda p: synth.evaluate(p, [1.0], [0.0]), "proper"),
        (lambda p: synth.evaluate(p, np.ones((3, 1)), np.ones((2, 1))), "one B"),
        (lambda p: synth.evaluate([], [1.0]), "no plant"),
    ],
)
def test_a_wrong_call_says_what_is_wrong(call, words):
    with pytest.raises(ValueError, match=words):
        call(synth.Plant.from_coefficients([1.0], [1.0, 1.0]))


def test_a_name_missing_from_the_table(table):
    with pytest.raises(KeyError, match="nearest is 'rise_time'"):
        table["risetime"]
    with pytest.raises(AttributeError):
        synth.nothing_of_the_kind  # noqa: B018


def test_names_handed_out_are_all_there():
    assert {"Plant", "evaluate", "Measure", "QUANTITIES", "Table"} <= set(dir(synth))
    for name in synth.__all__:
        assert getattr(synth, name) is not None


def test_the_version_is_the_project_s():
    text = (Path(__file__).parents[1] / "pyproject.toml").read_text(encoding="utf-8")
    assert synth.__version__ == tomllib.loads(text)["project"]["version"]


def test_importing_the_package_is_quick_and_loads_nothing_large():
    """Under 0.3 s is meant; here only what makes it slow is looked for, so that a busy machine does not
    matter."""
    code = "import sys, synth; print([m for m in ('numpy', 'scipy', 'optuna', 'rich') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
