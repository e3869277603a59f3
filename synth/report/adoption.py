"""What `synth adopt` says once it is done."""

from __future__ import annotations

from rich.text import Text

from synth.record import Adoption
from synth.report.settings import fraction, tuned_values
from synth.report.theme import hanging, items

RELEASE = "This states a choice and is no release to service: a model is not the machine."


def adopted(adoption: Adoption, width: int) -> list[Text]:
    """Which candidate, of which record."""
    head = Text.assemble(
        ("ADOPTED", "head"),
        f"  candidate {adoption['rank']} of {adoption['record']['file']}: {adoption['structure']}",
    )
    lines = [head]
    if adoption["parameters"]:
        lines.append(items("  ", tuned_values(adoption["parameters"], adoption.get("units", {})), width))
    lines.append(Text())
    lines.extend(fraction(adoption["compensator"], width))
    lines.append(Text())
    if adoption["verdict"] != "met":
        lines.append(hanging("  ", "It does not meet everything.", width, style="warn"))
    if adoption["note"]:
        lines.append(hanging("  note: ", adoption["note"], width))
    lines.append(hanging("  ", RELEASE, width, style="dim"))
    return lines
