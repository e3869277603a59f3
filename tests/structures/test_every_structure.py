"""What must hold for every structure of the registry, so that a new family cannot be missed."""

import pickle

import numpy as np
import pytest

from synth.structures import REGISTRY, SETTING_UNITS, by_name, same_function

EVERY = list(REGISTRY.values())
every = pytest.mark.parametrize("structure", EVERY, ids=lambda s: s.name)
TIME, GAIN = 3.7, 0.02


def drawn(structure, rows=64, seed=1):
    """Legal parameters, both signs of gain, magnitudes over four decades."""
    rng = np.random.default_rng(seed)
    low, high = structure.box()
    x = rng.uniform(np.maximum(low, -4.0), np.minimum(high, 4.0), size=(rows, len(low)))
    sign = np.where(rng.uniform(size=rows) < 0.5, -1.0, 1.0)
    return structure.from_search(x, sign, TIME, GAIN), x, sign


def value_at(rational, s):
    return np.array(
        [
            np.polyval(n, s) / np.polyval(d, s)
            for n, d in zip(rational.numerator, rational.denominator, strict=True)
        ]
    )


def formula_value(name, theta, s):
    """C(s) straight from the table of structures, written out a second time."""
    k = theta[0]
    if name == "P":
        return k + 0 * s
    if name == "PI":
        return k * (1 + 1 / (theta[1] * s))
    if name == "PD":
        return k * (1 + theta[1] * s / (theta[2] * s + 1))
    if name == "PID":
        return k * (1 + 1 / (theta[1] * s) + theta[2] * s / (theta[3] * s + 1))
    if name in ("lag", "lead"):
        return k * (s / theta[1] + 1) / (s / theta[2] + 1)
    if name == "lead-lag":
        return k * (s / theta[1] + 1) / (s / theta[2] + 1) * (s / theta[3] + 1) / (s / theta[4] + 1)
    if name == "PI-lead":
        return k * (1 + 1 / (theta[1] * s)) * (s / theta[2] + 1) / (s / theta[3] + 1)
    if name == "double-lead":
        return k * ((s / theta[1] + 1) / (s / theta[2] + 1)) ** 2
    raise AssertionError(f"a new structure, {name}: write its formula here")


@every
def test_realises_its_formula(structure):
    theta, _, _ = drawn(structure)
    s = np.array([0.3j, 2j, 1.0 + 0.5j, 11.0j])
    expected = np.array([formula_value(structure.name, row, s) for row in theta])
    np.testing.assert_allclose(value_at(structure.realise(theta), s), expected, rtol=1e-11)


@every
def test_is_proper_and_of_the_stated_order(structure):
    theta, _, _ = drawn(structure)
    c = structure.realise(theta)
    assert c.numerator.shape[1] <= c.denominator.shape[1] == structure.order + 1
    assert np.all(c.denominator[:, 0] != 0.0)
    assert structure.integral == bool(np.all(c.denominator[:, -1] == 0.0) and structure.order > 0)


@every
def test_a_row_alone_agrees(structure):
    theta, _, _ = drawn(structure)
    whole, alone = structure.realise(theta), structure.realise(theta[5:6])
    np.testing.assert_array_equal(whole.numerator[5:6], alone.numerator)
    np.testing.assert_array_equal(whole.denominator[5:6], alone.denominator)


@every
def test_search_coordinates_round_trip_and_the_box_is_the_legal_set(structure):
    theta, x, sign = drawn(structure, 200)
    assert structure.legal(theta).all()
    back, back_sign = structure.to_search(theta, TIME, GAIN)
    np.testing.assert_allclose(back, x, atol=1e-12)
    np.testing.assert_array_equal(back_sign, sign)
    low, high = structure.box()
    for i in np.flatnonzero(np.isfinite(high)):
        for bound, step in ((low[i], -2e-3), (high[i], 2e-3)):
            outside = x.copy()
            outside[:, i] = bound + step
            assert not structure.legal(structure.from_search(outside, sign, TIME, GAIN)).any()


@every
def test_coordinates_do_not_depend_on_units(structure):
    """A plant in minutes and one in seconds are searched in the same coordinates."""
    theta, x, sign = drawn(structure)
    minutes = structure.from_search(x, sign, TIME / 60.0, 2.0 * GAIN)
    roles = np.array(
        [{"gain": 0.5, "time": 1 / 60.0, "frequency": 60.0}[p.role] for p in structure.parameters]
    )
    np.testing.assert_allclose(minutes, theta * roles, rtol=1e-12)


@every
def test_illegal_rows_are_told(structure):
    theta, _, _ = drawn(structure, 4)
    theta[0, 0] = 0.0
    theta[1, -1] = np.nan
    theta[2, -1] = 0.0
    assert structure.legal(theta).tolist() == [False, False, False, True]


@every
def test_place_gives_unit_gain_and_the_phase(structure):
    rng = np.random.default_rng(3)
    crossover = np.exp(rng.uniform(-6, 6, 400))
    phase = rng.uniform(-np.pi, np.pi, 400)
    theta = structure.place(crossover, phase, rng.uniform(0.01, 0.99, (400, structure.freedoms)))
    found = np.isfinite(theta).all(axis=1)
    assert structure.legal(theta)[found].all()
    c = structure.response(theta[found], crossover[found])
    np.testing.assert_allclose(np.abs(c), 1.0, rtol=1e-12)
    assert (theta[found, 0] > 0).all()
    if structure.name != "P":
        np.testing.assert_allclose(np.angle(c), phase[found], atol=1e-9)
        assert 0.08 < found.mean() < 0.9  # finds a good part of the circle, and never claims what it cannot


# what each structure can add at one frequency, from its corner ratios: degrees, lowest and highest
REACH = {
    "PI": (-89, -1),
    "PD": (1, 78),
    "PID": (-85, 75),
    "lag": (-78, -1),
    "lead": (1, 69),
    "lead-lag": (-50, 65),
    "PI-lead": (-70, 65),
    "double-lead": (2, 138),
}


@pytest.mark.parametrize("name", REACH)
def test_place_covers_its_reach(name):
    structure = by_name(name)
    rng = np.random.default_rng(4)
    for degrees in np.linspace(*REACH[name], 13):
        theta = structure.place(
            np.ones(64), np.full(64, np.radians(degrees)), rng.uniform(0, 1, (64, structure.freedoms))
        )
        assert np.isfinite(theta).all(axis=1).any(), f"{degrees} deg"


@every
def test_rounding_stays_legal_and_keeps_the_digits(structure):
    theta, x, sign = drawn(structure, 300, seed=7)
    low, high = structure.box()
    pushed = x.copy()
    for i in np.flatnonzero(np.isfinite(high)):  # half of them on one bound, some on the other
        share = (x[:, i] - low[i]) / (high[i] - low[i])
        pushed[:, i] = np.where(share > 0.5, high[i], np.where(share < 0.2, low[i], x[:, i]))
    theta = structure.from_search(pushed, sign, TIME, GAIN)
    rounded = structure.rounded(theta, 4)
    assert structure.legal(rounded).all()
    np.testing.assert_allclose(rounded, theta, rtol=2e-3)
    for value in rounded.ravel():
        assert float(f"{value:.3e}") == value


@every
def test_settings_are_named_with_units_and_mean_the_same_function(structure):
    theta, _, _ = drawn(structure, 30, seed=9)
    for row in theta:
        forms = structure.settings(row)
        assert "standard" in forms or "series" in forms
        for form, values in forms.items():
            assert form in structure.forms
            assert set(values) <= set(SETTING_UNITS)
            assert all(type(v) is float and np.isfinite(v) for v in values.values())


def _value(form, v, s):
    """C(s) from what a practitioner would type in."""
    if form in ("standard", "series, filtered derivative", "derivative") and "derivative time" in v:
        d = v["derivative time"] * s / (v["filter time"] * s + 1)
        if form == "series, filtered derivative":
            return v["gain"] * (1 + 1 / (v["integral time"] * s)) * (1 + d)
        i = 1 / (v["integral time"] * s) if "integral time" in v else 0
        return v["gain"] * (1 + i + d)
    if form == "series":
        i, lead = (
            1 + 1 / (v["integral time"] * s),
            (v["derivative time"] * s + 1) / (v["filter time"] * s + 1),
        )
        return v["gain"] * i * lead
    if form == "parallel":
        d = v.get("derivative gain", 0.0) * s / (v.get("filter time", 0.0) * s + 1)
        return v["proportional gain"] + v.get("integral gain", 0.0) / s + d
    if form == "corner":
        return v["integral gain"] * (1 + s / v["zero corner"]) / s
    if form == "notch of zeros":
        w, z = v["zero frequency"], v["zero damping"]
        return v["integral gain"] * (s**2 / w**2 + 2 * z * s / w + 1) / (s * (v["filter time"] * s + 1))
    if form == "standard" and "integral time" in v:
        return v["gain"] * (1 + 1 / (v["integral time"] * s))
    if "zero corner" in v and "pole corner" in v:
        return v["gain"] * (s / v["zero corner"] + 1) / (s / v["pole corner"] + 1)
    return None


@every
def test_every_form_gives_the_function_back(structure):
    theta, _, _ = drawn(structure, 40, seed=11)
    s = 0.7j
    seen = set()
    for row in theta:
        exact = structure.response(row[None, :], np.array([0.7]))[0]
        for form, v in structure.settings(row).items():
            value = _value(form, v, s) if form != "ends" else None
            if value is None:
                continue
            if structure.name == "double-lead":
                value = v["gain"] * (value / v["gain"]) ** 2
            if structure.name == "PI-lead" and form == "one line":
                value *= 1 + 1 / (v["integral time"] * s)
            np.testing.assert_allclose(value, exact, rtol=1e-9, err_msg=form)
            seen.add(form)
    assert structure.name in ("P", "lead-lag") or seen >= set(structure.forms) - {"ends"}


@every
def test_recognises_itself(structure):
    theta, _, _ = drawn(structure, 60, seed=13)
    c = structure.realise(theta)
    s = 1j * np.logspace(-3, 3, 7)
    missed = 0
    for num, den in zip(c.numerator, c.denominator, strict=True):
        names = same_function(num, den)
        for other, values in names:
            assert other.legal(values[None, :])[0]
            again = other.realise(values[None, :])
            np.testing.assert_allclose(
                value_at(again, s)[0], np.polyval(num, s) / np.polyval(den, s), rtol=3e-3
            )
        missed += structure.name not in [n.name for n, _ in names]
    assert missed <= 3  # only where two of its corners fall on one another, and a simpler name comes out


@every
def test_travels_between_processes(structure):
    again = pickle.loads(pickle.dumps(structure))
    assert again.name == structure.name
    theta, _, _ = drawn(structure, 2)
    np.testing.assert_array_equal(again.realise(theta).numerator, structure.realise(theta).numerator)


@every
def test_simpler_ones_exist_and_come_first(structure):
    names = list(REGISTRY)
    assert all(names.index(s) < names.index(structure.name) for s in structure.simpler)


def test_wrong_shapes_are_refused():
    with pytest.raises(ValueError, match="rows of 2 parameters"):
        by_name("PI").realise(np.ones((3, 3)))
    with pytest.raises(ValueError, match="shares must have shape"):
        by_name("lead").place(np.ones(2), np.ones(2), np.ones((2, 2)))
    with pytest.raises(KeyError, match="no structure 'PDI'"):
        by_name("PDI")
