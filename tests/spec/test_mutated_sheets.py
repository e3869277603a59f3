"""The shipped sheets with a few characters, words or lines changed: read or refused with a place, in time."""

import random
import time
from pathlib import Path

import pytest

from synth.errors import InputError
from synth.spec import parse_spec

SHEETS = sorted((Path(__file__).parents[2] / "specs").glob("*.toml"))
BITS = (
    "[", "]", "{", "}", '"', "'", "=", ",", "\n", "#", " ", "s", "^", "*", "(", ")", "-", "0", "1e999", "nan",
    "inf", "1e-320", '"""', "\\", "\x00", "é", "\ud800", "true", "1979-05-27", "Hz", "%", "exp(", "sqrt(",
    "[[cases]]", "[plant]", "10 dB", "0x1F", "1_000", ".5", "-0.0", "[" * 200, "(" * 200, "9" * 400,
)  # fmt: skip


def changed(text, chance):
    for _ in range(chance.randrange(1, 4)):
        kind, at = chance.randrange(5), chance.randrange(len(text))
        lines = text.split("\n")
        if kind == 0:
            text = text[:at] + chance.choice(BITS) + text[at:]
        elif kind == 1:
            text = text[:at] + chance.choice(BITS) + text[at + chance.randrange(1, 12) :]
        elif kind == 2:
            text = text[:at] + text[at + chance.randrange(1, 30) :]
        elif kind == 3:
            lines.insert(chance.randrange(len(lines)), chance.choice(lines))
            text = "\n".join(lines)
        else:
            one, other = chance.randrange(len(lines)), chance.randrange(len(lines))
            lines[one], lines[other] = lines[other], lines[one]
            text = "\n".join(lines)
        text = text or "x"
    return text


@pytest.mark.parametrize("path", SHEETS, ids=lambda path: path.stem)
def test_read_or_refused_with_a_place(path):
    chance, whole = random.Random(path.stem), path.read_text(encoding="utf-8")
    read = refused = 0
    for _ in range(60):
        text = changed(whole, chance)
        begun = time.process_time()
        try:
            parse_spec(text, "f.toml")
        except InputError as error:
            refused += 1
            for fault in error.faults:
                assert fault.what
                assert fault.file == "f.toml"
                assert 1 <= (fault.line or 1) <= text.count("\n") + 1
        else:
            read += 1
        assert time.process_time() - begun < 2.0
    assert read
    assert refused
