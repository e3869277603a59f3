"""The command line as it may be typed: commands, options, help.

Every mistake becomes a fault with the nearest name.
"""

from __future__ import annotations

import argparse
import re
import textwrap
from collections.abc import Sequence
from pathlib import Path
from typing import NoReturn

from synth.errors import Fault, InputError, nearest

COMMANDS = {
    "propose": "search, and print the ranked report; writes a record",
    "show": "a record's report again, or one candidate in full",
    "compare": "candidates of one or more records side by side",
    "adopt": "state which candidate goes into service",
    "rerun": "the plant was revised: keep, retune, restructure or relax?",
    "check": "read a spec; the plant, and what no compensator can do on it",
    "score": "score a compensator you bring against a spec",
    "structures": "the structures that are searched, in words",
    "schema": "the JSON Schema of a spec file",
    "new": "write a commented spec to start from",
}
BUDGETS = ("quick", "normal", "thorough")

HELP = """\
usage: synth COMMAND ...

From a sheet of requirements and a plant to ranked, explained compensators.

{commands}

`synth COMMAND --help` has the options of each. To begin: synth new mast.toml, then synth propose mast.toml.
Exit codes: 0 met, 1 not met, 2 bad input, 3 a fault of the program, 130 interrupted."""


class Usage(InputError):
    """What was typed cannot be meant."""


class _Parser(argparse.ArgumentParser):
    """Raises instead of printing and leaving."""

    def error(self, message: str) -> NoReturn:
        match = re.match(r"argument ([^:]+): (.*)", message, re.DOTALL)
        if match:
            option = match.group(1).split("/")[-1]
            raise Usage([Fault(match.group(2), key=option, allowed=_shape(self))])
        raise Usage([Fault(message, allowed=_shape(self))])


def _shape(parser: argparse.ArgumentParser) -> str:
    return " ".join(parser.format_usage().removeprefix("usage: ").split())


def parse(words: Sequence[str]) -> argparse.Namespace:
    """What was typed, as a namespace with `command` first.

    Raises Usage; SystemExit(0) after help or version.
    """
    if not words or words[0] in ("-h", "--help", "help"):
        return argparse.Namespace(command="help")
    if words[0] in ("-V", "--version"):
        return argparse.Namespace(command="version")
    command = words[0]
    if command not in COMMANDS:
        raise Usage(
            [
                Fault(
                    "unknown option" if command.startswith("-") else "unknown command",
                    given=command,
                    allowed=", ".join(COMMANDS),
                    nearest=nearest(command, COMMANDS),
                )
            ]
        )
    parser = _parser(command)
    found, rest = parser.parse_known_args(_joined(words[1:]))
    if rest:
        options = [o for a in parser._actions for o in a.option_strings]
        raise Usage(
            Fault(
                "unknown option" if word.startswith("-") else "one word too many",
                given=word,
                allowed=_shape(parser),
                nearest=nearest(word.split("=")[0], options) if word.startswith("-") else None,
            )
            for word in [w for w in rest if w.startswith("-")] or rest
        )
    found.command = command
    return found


def _joined(words: Sequence[str]) -> list[str]:
    """A compensator that begins with a minus belongs to its option: it is none itself."""
    out: list[str] = []
    for word in words:
        if out and out[-1] == "--compensator" and re.match(r"-[\s\d.(a-z]", word):
            out[-1] = f"--compensator={word}"
        else:
            out.append(word)
    return out


def help_text(width: int = 10_000) -> str:
    """What `synth --help` prints on a page of that many columns."""
    room = max(map(len, COMMANDS)) + 4
    rows = [f"  {name:<{room - 2}}{words}" for name, words in COMMANDS.items()]
    lines = HELP.format(commands="\n".join(rows)).splitlines()
    return "\n".join(
        textwrap.fill(line, width, subsequent_indent=" " * room if line.startswith("  ") else "")
        for line in lines
    )


def _parser(command: str) -> argparse.ArgumentParser:
    parser = _Parser(prog=f"synth {command}", description=_sentence(COMMANDS[command]), allow_abbrev=False)
    add = parser.add_argument
    if command in ("propose", "rerun", "check", "score"):
        add("spec", metavar="SPEC", type=_path, help="the spec file (TOML)")
    if command in ("show", "adopt"):
        add("record", metavar="RECORD", type=_path, help="a record, as a run wrote it")
    if command == "show":
        add("--rank", metavar="N", type=_rank, help="one candidate in full")
    if command == "adopt":
        add("rank", metavar="RANK", type=_rank, help="of the candidate that goes into service")
        add("--note", metavar="TEXT", help="why; needed where it does not meet everything")
    if command == "compare":
        add("records", metavar="RECORD", nargs="+", type=_path, help="one or more records")
    if command == "new":
        add("path", metavar="PATH", type=_path, help="of the spec to write; must not exist")
    if command == "rerun":
        add(
            "--against",
            metavar="RECORD",
            type=_path,
            help="the earlier record (default: the newest one of the spec)",
        )
    if command == "score":
        add("--compensator", metavar='"NUM / DEN"', required=True, help="a formula in s")
    if command in ("propose", "rerun", "score"):
        name = "out"  # show and adopt take a record of their own
        add(
            "--record",
            metavar="PATH",
            dest=name,
            type=_path,
            help="where to write (default: records/ beside the spec)",
        )
    if command in ("propose", "rerun"):
        _search_options(parser)
    if command == "propose":
        add("--trade", metavar="A,B", type=_pair, help="the trade-off of two quantities as well")
    if command not in ("structures", "schema", "new"):
        add("--json", action="store_true", help="the record on standard output, and nothing else there")
    return parser


def _search_options(parser: argparse.ArgumentParser) -> None:
    add = parser.add_argument
    add("--seed", metavar="N", type=_whole, help="of the search (default: the spec's)")
    add("--budget", metavar="B", type=_budget, help="quick, normal or thorough (default: the spec's)")
    add("--time-limit", metavar='"20 s"', type=_time, help="end the search then, and keep the best so far")
    add("--show", metavar="N", type=_rank, help="the candidate shown in full (default: 1)")
    add("--study", metavar="URL", help="storage of the outer exploration; never printed or recorded")


def _sentence(words: str) -> str:
    return words[:1].upper() + words[1:] + "."


def _path(text: str) -> Path:
    if not text or "\0" in text:
        raise argparse.ArgumentTypeError("a path was expected")
    return Path(text)


def _whole(text: str) -> int:
    if not re.fullmatch(r"\d{1,9}", text):
        raise argparse.ArgumentTypeError(f"a whole number from 0 was expected, not {text!r}")
    return int(text)


def _rank(text: str) -> int:
    if not re.fullmatch(r"\d{1,6}", text) or int(text) < 1:
        raise argparse.ArgumentTypeError(f"a rank is a whole number from 1, not {text!r}")
    return int(text)


def _budget(text: str) -> str:
    if text not in BUDGETS:
        near = nearest(text, BUDGETS)
        hint = f"; did you mean {near}?" if near else ""
        raise argparse.ArgumentTypeError(f"quick, normal or thorough was expected, not {text!r}{hint}")
    return text


def _time(text: str) -> float:
    from synth.spec.units import UnitFault, measured

    try:
        seconds = measured(text, "time")
    except UnitFault:
        raise argparse.ArgumentTypeError(
            f'a time with its unit was expected, such as "20 s", not {text!r}'
        ) from None
    if not seconds > 0.0:
        raise argparse.ArgumentTypeError(f"a time above 0 was expected, not {text!r}")
    return seconds


def _pair(text: str) -> tuple[str, str]:
    names = [name.strip() for name in text.split(",")]
    if len(names) != 2 or not all(names):
        raise argparse.ArgumentTypeError(f"two quantities with a comma between were expected, not {text!r}")
    return names[0], names[1]
