"""The command `synth`: verbs to jobs, what they hand back to the report, and the exit code.

0 met (or the work was done), 1 not met, 2 bad input or usage, 3 a fault of the program itself, 130
interrupted. What is heavy is imported when a command needs it.
"""

from __future__ import annotations

import argparse
import os
import re
import shutil
import signal
import sys
import tempfile
import traceback
from collections.abc import Callable, Iterable, Sequence
from contextlib import suppress
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

from synth import arguments
from synth.errors import Fault, InputError

if TYPE_CHECKING:
    from rich.text import Text

    from synth.jobs.options import Done, Options
    from synth.record import Record

MET, NOT_MET, BAD_INPUT, OWN_FAULT, INTERRUPTED = 0, 1, 2, 3, 130


def main(words: Sequence[str] | None = None) -> int:
    """Run one command; returns the exit code."""
    words = list(sys.argv[1:] if words is None else words)
    for stream in (sys.stdout, sys.stderr):  # a terminal that cannot show a sign gets a "?", not a crash
        with suppress(AttributeError, ValueError):
            stream.reconfigure(errors="replace")  # type: ignore[union-attr]
    typed: argparse.Namespace | None = None
    try:
        typed = arguments.parse(words)
        code = _run(typed)
        sys.stdout.flush()
    except SystemExit as end:  # help of one command
        return int(end.code or 0)
    except InputError as trouble:
        try:
            _print_faults(trouble.faults, typed)
        except Exception as fault:
            return _own_fault(fault, typed)
        return BAD_INPUT
    except KeyboardInterrupt:
        print("interrupted; nothing was written", file=sys.stderr)  # noqa: T201
        return INTERRUPTED
    except BrokenPipeError:  # the reader of our output has gone: nothing is wrong
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return MET
    except Exception as fault:
        return _own_fault(fault, typed)
    return code


def _run(typed: argparse.Namespace) -> int:
    if typed.command == "help":
        width = shutil.get_terminal_size().columns  # before anything heavy is imported
        print(arguments.help_text(max(40, width)))  # noqa: T201
        return MET
    if typed.command == "version":
        import synth

        print(f"synth {synth.__version__}")  # noqa: T201
        return MET
    return _VERBS[typed.command](typed)


def _propose(typed: argparse.Namespace) -> int:
    from synth.jobs.propose import propose

    return _searched(typed, lambda options: propose(typed.spec, options))


def _rerun(typed: argparse.Namespace) -> int:
    from synth.jobs.rerun import rerun

    return _searched(typed, lambda options: rerun(typed.spec, typed.against, options))


def _searched(typed: argparse.Namespace, job: Callable[[Options], Done]) -> int:
    """Run a job that searches: progress where it can be seen, Ctrl-C keeps the best so far."""
    from synth.jobs.options import Options
    from synth.report.progress import Watch
    from synth.report.theme import console

    with _Stop() as stop, Watch(console(sys.stderr)) as watch:
        done = job(
            Options(
                seed=typed.seed,
                budget=typed.budget,
                time_limit=typed.time_limit,
                record=typed.out,
                study=typed.study,
                trade=getattr(typed, "trade", None),
                progress=watch,
                stop=stop,
            )
        )
    _hand_out(done.record, done.path, typed, in_full=typed.show)
    return INTERRUPTED if done.record["search"]["interrupted"] else _code(done.record)


def _code(record: Record) -> int:
    """0 where the one that counts meets everything: in a rerun the adopted one, untouched; else the first."""
    revision = record["revision"]
    if revision is not None and revision["adopted"] is not None:
        return MET if revision["adopted"]["meets_all"] else NOT_MET
    if not record["candidates"]:
        return NOT_MET
    first = record["candidates"][0]
    doubted = first["verified"] is not None and not first["verified"]["agrees"]
    return MET if first["meets_all"] and not doubted else NOT_MET


def _score(typed: argparse.Namespace) -> int:
    from synth.jobs.options import Options
    from synth.jobs.score import score

    done = score(typed.spec, typed.compensator, Options(record=typed.out))
    _hand_out(done.record, done.path, typed)
    return _code(done.record)


def _hand_out(
    record: Record, path: Path | None, typed: argparse.Namespace, in_full: int | None = None
) -> None:
    from synth.record import text_of

    if typed.json:
        sys.stdout.write(text_of(record))
        return
    from synth.report.page import page

    _draw(lambda width: page(record, width, in_full=in_full))
    if path is not None:
        print(f"record: {path}")  # noqa: T201


def _show(typed: argparse.Namespace) -> int:
    from synth.jobs.show import candidate_of, show
    from synth.record import text_of
    from synth.report import one_candidate, page

    record = show(typed.record).record
    if typed.rank is not None:
        candidate = candidate_of(record, typed.rank, str(typed.record), "--rank")
        if not typed.json:
            _draw(lambda width: one_candidate(record, candidate, width))
            return MET
    if typed.json:
        sys.stdout.write(text_of(record))
        return MET
    _draw(lambda width: page(record, width))
    return MET


def _compare(typed: argparse.Namespace) -> int:
    from synth.jobs.compare import compare
    from synth.record import text_of
    from synth.report import comparison

    found = compare(typed.records)
    if typed.json:
        sys.stdout.write(text_of({"records": [stored.record for stored in found]}))
        return MET
    named = [(str(path), stored.record) for path, stored in zip(typed.records, found, strict=True)]
    _draw(lambda width: comparison(named, width))
    return MET


def _adopt(typed: argparse.Namespace) -> int:
    from synth.jobs.adopt import adopt
    from synth.record import text_of
    from synth.report.adoption import adopted

    adoption, path = adopt(typed.record, typed.rank, typed.note)
    if typed.json:
        sys.stdout.write(text_of(adoption))
        return MET
    _draw(lambda width: adopted(adoption, width))
    print(f"adoption: {path}")  # noqa: T201
    return MET


def _check(typed: argparse.Namespace) -> int:
    from synth.jobs.check import check
    from synth.record import text_of
    from synth.report import plant

    found = check(typed.spec)
    if typed.json:
        sys.stdout.write(text_of(found))
    else:
        _draw(lambda width: plant(found, width))
    return NOT_MET if any(limit["violates"] for limit in found["limits"]) else MET


def _structures(typed: argparse.Namespace) -> int:
    from synth.jobs.lists import structures
    from synth.report.structures import structures as drawn

    found = structures()
    _draw(lambda width: drawn([(s.name, s.formula, s.words, s.tuned) for s in found], width))
    return MET


def _schema(typed: argparse.Namespace) -> int:
    from synth.jobs.lists import schema

    print(schema())  # noqa: T201
    return MET


def _new(typed: argparse.Namespace) -> int:
    from synth.jobs.lists import new

    path = new(typed.path)
    print(f"{path} written. Edit it, then:\n  synth check {path}\n  synth propose {path}")  # noqa: T201
    return MET


_VERBS: dict[str, Callable[[argparse.Namespace], int]] = {
    "propose": _propose,
    "show": _show,
    "compare": _compare,
    "adopt": _adopt,
    "rerun": _rerun,
    "check": _check,
    "score": _score,
    "structures": _structures,
    "schema": _schema,
    "new": _new,
}


def _draw(lines: Callable[[int], Iterable[Text]], to: Any = None) -> None:
    """Print lines that were made for the width of the terminal."""
    from synth.report.theme import console, fitted

    out = console(to)
    for line in lines(out.width):
        out.print(fitted(line, out.width), no_wrap=True, overflow="ignore", crop=False)


def _print_faults(found: Sequence[Fault], typed: argparse.Namespace | None) -> None:
    from synth.report.faults import faults

    step = "" if typed is not None else "`synth --help` lists the commands."
    if any(fault.key and fault.key.startswith("search.structures") for fault in found):
        step = "`synth structures` describes each one."
    _draw(lambda width: faults(found, width, next_step=step), to=sys.stderr)


def _own_fault(fault: Exception, typed: argparse.Namespace | None) -> int:
    """One line on the screen; the details in a file.

    A study's address may hold a password: it is kept out.
    """
    text = "".join(traceback.format_exception(fault))
    secret = getattr(typed, "study", None)
    line = str(fault).splitlines()[0] if str(fault) else ""
    if secret:
        password = re.search(r":([^:/@]+)@", secret)
        for part in (secret, password.group(1) if password else secret):
            text, line = text.replace(part, "(study)"), line.replace(part, "(study)")
    where = "no place to write the details"
    with suppress(OSError):
        handle, where = tempfile.mkstemp(prefix="synth-fault-", suffix=".txt")
        with os.fdopen(handle, "w", encoding="utf-8") as out:
            out.write(text)
    what = f"{type(fault).__name__}: {line[:120]}"
    sys.stderr.write(f"synth: a fault of the program ({what}); details: {where}\n")
    return OWN_FAULT


class _Stop:
    """Asked by a search whether to stop. The first Ctrl-C says yes; the second ends at once."""

    def __init__(self) -> None:
        self._asked = False
        self._before: Any = None

    def __call__(self) -> bool:
        return self._asked

    def __enter__(self) -> _Stop:
        with suppress(ValueError):  # not the main thread: then there is no Ctrl-C to catch
            self._before = signal.signal(signal.SIGINT, self._on_signal)
        return self

    def __exit__(self, *about: object) -> None:
        if self._before is not None:
            signal.signal(signal.SIGINT, self._before)

    def _on_signal(self, number: int, frame: FrameType | None) -> None:
        if self._asked:
            raise KeyboardInterrupt
        self._asked = True


if __name__ == "__main__":
    sys.exit(main())
