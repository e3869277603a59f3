"""Places of keys and values, against the standard parser on texts of all shapes; words for common slips."""

import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.errors import InputError
from synth.spec.positions import Slip, dotted, line_and_column, scan
from synth.spec.source import Source

TEXT = '''# a comment with [brackets] and "quotes"
title = "x # no comment"
a.b = 1
[plant]
A = [ [0, 1],
      [ -4, "k" ] ]  # rows
"quoted key" = 'lit'
long = """
many [lines]
"""
[plant.input]
name = "u"
[[cases]]
name = "one"
K = { value = 1.5, range = [1, 2] }
[[cases]]
name = "two"
[cases.extra]
x = 1979-05-27 07:32:00
'''


def test_places():
    spans = scan(TEXT)
    lines = {dotted(path): line_and_column(TEXT, span.key)[0] for path, span in spans.items()}
    assert lines == {
        "title": 2, "a": 3, "a.b": 3, "plant": 4, "plant.A": 5, "plant.A[0]": 5, "plant.A[0][0]": 5,
        "plant.A[0][1]": 5, "plant.A[1]": 6, "plant.A[1][0]": 6, "plant.A[1][1]": 6, 'plant."quoted key"': 7,
        "plant.long": 8, "plant.input": 11, "plant.input.name": 12, "cases": 13, "cases[0]": 13,
        "cases[0].name": 14, "cases[0].K": 15, "cases[0].K.value": 15, "cases[0].K.range": 15,
        "cases[0].K.range[0]": 15, "cases[0].K.range[1]": 15, "cases[1]": 16, "cases[1].name": 17,
        "cases[1].extra": 18, "cases[1].extra.x": 19,
    }  # fmt: skip
    span = spans["plant", "A", 1, 1]
    assert TEXT[span.start : span.stop] == '"k"'
    assert set(paths(tomllib.loads(TEXT))) == set(spans)


def paths(value, base=()):
    """Every key and element of parsed TOML."""
    if base:
        yield base
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield from paths(inner, (*base, key))


KEYS = st.sampled_from(["a", "b", "c-1", "d_2", "3", '"e f"', "'g.h'"])
SCALARS = st.sampled_from(
    ["1", "-2.5", "1e3", "inf", "nan", "true", '"x"', '"a # [b] \\" \\\\"', "'c'", "0x1F", "1_000", '""',
     "07:32:00", "1979-05-27T07:32:00Z", "1979-05-27", '"""a\n"b" ""\n"""', "'''c\n''d'''", '""""q"""']
)  # fmt: skip
VALUES = st.recursive(
    SCALARS,
    lambda inner: (
        st.lists(inner, max_size=3).map(lambda v: "[ " + ",\n # note\n".join(v) + "]")
        | st.lists(st.tuples(KEYS, inner), max_size=3, unique_by=lambda p: p[0]).map(
            lambda v: "{" + ", ".join(f"{k} = {x}" for k, x in v) + "}"
        )
    ),
    max_leaves=6,
)
LINES = st.one_of(
    st.tuples(KEYS, VALUES).map(lambda p: f"{p[0]} = {p[1]} # end"),
    st.tuples(KEYS, KEYS, VALUES).map(lambda p: f"{p[0]} . {p[1]}={p[2]}"),
    KEYS.map(lambda k: f"[{k}]"),
    st.tuples(KEYS, KEYS).map(lambda p: f"[ {p[0]}.{p[1]} ]"),
    KEYS.map(lambda k: f"[[{k}]]"),
    st.just("# only a comment"),
    st.just(""),
)


@given(st.lists(LINES, max_size=8), st.sampled_from(["\n", "\r\n"]))
def test_the_scanner_sees_what_the_standard_parser_sees(lines, end):
    text = end.join(lines)
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        data = None
    try:
        spans = scan(text)
    except Slip:
        spans = None
    if data is not None:
        assert spans is not None
        assert set(spans) == set(paths(data))


@given(st.text(alphabet="ab=[]{}\"'.,#\n 1-e\\", max_size=30) | st.text(max_size=20))
def test_any_text_is_read_or_refused_with_a_line(text):
    fault = None
    try:
        Source.of(text, "f.toml")
    except InputError as error:
        (fault,) = error.faults
    if fault is not None:
        assert fault.file == "f.toml"
        assert 1 <= fault.line <= text.count("\n") + 1
        assert f"(line {fault.line}, column " in fault.what


QUOTE = "a number, a text in quotes, a list or { ... }"
NEITHER = "is neither a number nor a text in quotes"
UNCLOSED = "this `{` is not closed on its line"
ONE_LINE = "{ key = value, key = value } on one line"
KEY = 'letters, digits, "_" and "-"; other keys in quotes'


@pytest.mark.parametrize(
    ("text", "what", "given_", "words"),
    [
        ("a = [1,\n2", "this `[` is never closed (line 1, column 5)", "a = [1,", None),
        ("[plant", "a table's name ends with `]` (line 1, column 7)", "[plant", None),
        ("x = 1\n  y = 10 %", f"`10 %` {NEITHER} (line 2, column 7)", "y = 10 %", 'write "10 %"'),
        ("y = K/(s+1)", f"`K/(s+1)` {NEITHER} (line 1, column 5)", "y = K/(s+1)", 'write "K/(s+1)"'),
        ("y = 1.5.3", f"`1.5.3` {NEITHER} (line 1, column 5)", "y = 1.5.3", QUOTE),
        ("y =", "a value must stand here (line 1, column 4)", "y =", QUOTE),
        ('x = "abc', "this text has no closing quote (line 1, column 5)", 'x = "abc', None),
        ("t = 1\nt = 2", "`t` is written twice, first on line 1 (line 2, column 1)", "t = 2", None),
        ("[a]\n[b]\n[a]", "`a` is written twice, first on line 1 (line 3, column 1)", "[a]", None),
        ("x = { a = 1,\nb = 2 }", f"{UNCLOSED} (line 1, column 5)", "x = { a = 1,", ONE_LINE),
        ("x = { a = 1 b = 2 }", f"`1 b = 2` {NEITHER} (line 1, column 11)", "x = { a = 1 b = 2 }", QUOTE),
        ('x = ["a" "b"]', "`,` or `]` must stand here (line 1, column 10)", 'x = ["a" "b"]', None),
        ('x = "a" 2', "nothing may follow here on the same line (line 1, column 8)", 'x = "a" 2', None),
        ("= 1", "a key cannot begin with `=` (line 1, column 1)", "= 1", KEY),
        ("x", "`=` must follow the key (line 1, column 2)", "x", None),
        ("x = " + "[" * 50, "more than 20 brackets inside one another (line 1, column 26)",
         "x = " + "[" * 50, None),
        ("a" + ".a" * 30 + " = 1", "a key with more than 10 parts (line 1, column 21)",
         ("a" + ".a" * 30)[:57] + "...", None),
        ("x=" + "1" * 5000, "a number has too many digits (line 1, column 3)", "x=" + "1" * 55 + "...", None),
    ],
)  # fmt: skip
def test_words_for_common_slips(text, what, given_, words):
    with pytest.raises(InputError) as caught:
        Source.of(text, "f.toml")
    (fault,) = caught.value.faults
    line = int(what.split("(line ")[1].split(",")[0])
    assert (fault.what, fault.file, fault.line) == ("not TOML: " + what, "f.toml", line)
    assert (fault.given, fault.allowed, fault.key) == (given_, words, None)


@pytest.mark.parametrize("text", ["a.b = 1\n[a]\nc = 2", 'x = 1\ny = "\\q"'])
def test_other_slips_in_the_librarys_words(text):
    with pytest.raises(InputError) as caught:
        Source.of(text, "f.toml")
    (fault,) = caught.value.faults
    assert fault.line == 2
    assert fault.what.startswith("not TOML: ")
    assert "(line 2, column " in fault.what
    assert "('" not in fault.what
