"""A whole report from a record alone, in reading order."""

from __future__ import annotations

from rich.text import Text

from synth.record import Candidate, Record
from synth.report import reach, summary
from synth.report.account import account
from synth.report.revision import revision
from synth.report.theme import items
from synth.report.trade import trade


def page(record: Record, width: int, *, in_full: int | None = None) -> list[Text]:
    """Verdict, cautions, the list, one candidate in full, what is not on offer.

    in_full : rank of the candidate that is shown in full; None takes the first, in a rerun the one that would
    take over.
    """
    lines = [summary.title(record, width)]
    if record["revision"] is not None:  # a rerun was asked about the one in service: that comes first
        lines.extend(revision(record, width))
    lines.extend(summary.verdict(record, width))
    scoring = record.get("job") == "score"
    if not scoring:
        lines.extend(summary.ranked(record, width))
        lines.extend(summary.values(record, width))
    lines.extend(reach.prices(record, width))
    chosen = _of_rank(record, in_full if in_full is not None else _first_of_interest(record))
    if chosen is not None:
        lines.extend(account(record, chosen, width))
    elif in_full is not None:
        lines.append(Text(f"\nThere is no candidate {in_full}.", style="warn"))
    lines.extend(trade(record, width))
    lines.extend(reach.rejected(record, width))
    lines.extend(reach.limits(record, width))
    lines.extend(_footer(record, width))
    return lines


def one_candidate(record: Record, candidate: Candidate, width: int) -> list[Text]:
    """One candidate alone, in full."""
    return [summary.title(record, width), *account(record, candidate, width), *_footer(record, width)]


def _of_rank(record: Record, rank: int) -> Candidate | None:
    return next((c for c in record["candidates"] if c["rank"] == rank), None)


def _first_of_interest(record: Record) -> int:
    revision_part = record["revision"]
    return (revision_part.get("successor") if revision_part is not None else None) or 1


def _footer(record: Record, width: int) -> list[Text]:
    search = record["search"]
    budget = search.get("budget")
    parts = [f"synth {record['tool']['version']}", record["created"]]
    if record.get("job") != "score":
        parts.append(f"seed {search['seed']}")
        if budget:
            parts.append(f"budget {budget}")
    if search.get("limited"):
        parts.append("ended by the time limit: another machine may find other candidates")
    line = items("", parts, width)
    line.stylize("dim")
    return [Text(), line]
