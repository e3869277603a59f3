"""What differs between two sheets: parameters, tolerances, operating cases, the formula, the limits."""

from __future__ import annotations

from typing import Any

from synth.record.format import Case, Change, Plant, Requirement, SpecPart


def changes(
    old: tuple[Plant, list[Requirement], SpecPart], new: tuple[Plant, list[Requirement], SpecPart]
) -> list[Change]:
    """Every change from the old sheet to the new one: the plant first, then what is asked of it."""
    found = [*_plant(old[0], new[0]), *_requirements(old[1], new[1])]
    found.extend(_settings(old[2], new[2]))
    return found


def _change(what: str, case: str | None, old: Any, new: Any) -> Change:
    return {"what": what, "case": case, "old": old, "new": new}


def _plant(old: Plant, new: Plant) -> list[Change]:
    out = []
    forms = old.get("form"), new.get("form")
    if None not in forms and forms[0] != forms[1]:
        out.append(_change("plant", None, *forms))
    before, after = old["cases"][0], new["cases"][0]
    out.extend(_parameters(before["parameters"], after["parameters"], None))
    out.extend(_tolerances(old, new))
    if not out:  # a plant without named parameters: its coefficients speak
        for what in ("numerator", "denominator", "dead_time"):
            if before[what] != after[what]:
                out.append(_change(what, None, before[what], after[what]))
    out.extend(_operating(old, new))
    return out


def _parameters(old: dict[str, float], new: dict[str, float], case: str | None) -> list[Change]:
    names = list(dict.fromkeys((*new, *old)))
    return [_change(n, case, old.get(n), new.get(n)) for n in names if old.get(n) != new.get(n)]


def _tolerances(old: Plant, new: Plant) -> list[Change]:
    """Ends of a tolerance, relative to the nominal, so that a moved nominal alone does not count again."""
    before = {r["name"]: r for r in old.get("ranges", [])}
    out = []
    for r in new.get("ranges", []):
        b = before.get(r["name"])
        if b is None or not b["nominal"] or not r["nominal"]:
            continue
        for end in ("low", "high"):
            was, now = b[end] / b["nominal"], r[end] / r["nominal"]
            if abs(was - now) > 1e-9:
                out.append(_change(f"{r['name']} {end}", None, b[end], r[end]))
    return out


def _operating(old: Plant, new: Plant) -> list[Change]:
    def named(plant: Plant) -> dict[str, Case]:
        return {c["name"]: c for c in plant["cases"] if c.get("role") == "operating"}

    before, after = named(old), named(new)
    base_old, base_new = old["cases"][0]["parameters"], new["cases"][0]["parameters"]
    out = []
    for name in dict.fromkeys((*after, *before)):
        if name not in before:
            out.append(_change("operating case", name, None, after[name]["parameters"]))
        elif name not in after:
            out.append(_change("operating case", name, before[name]["parameters"], None))
        else:
            was, now = before[name]["parameters"], after[name]["parameters"]
            # what the case takes over from the nominal is listed there
            moved = {n for n in now if was.get(n) == base_old.get(n) and now[n] == base_new.get(n)}
            own_old = {n: v for n, v in was.items() if n not in moved}
            own_new = {n: v for n, v in now.items() if n not in moved}
            out.extend(_parameters(own_old, own_new, name))
    return out


def _requirements(old: list[Requirement], new: list[Requirement]) -> list[Change]:
    before, after = {r["id"]: r for r in old}, {r["id"]: r for r in new}
    out = []
    for name in dict.fromkeys((*after, *before)):
        was, now = before.get(name), after.get(name)
        if was is None or now is None:
            out.append(_change(name, None, was["limit"] if was else None, now["limit"] if now else None))
            continue
        if was["limit"] != now["limit"]:
            out.append(_change(name, None, was["limit"], now["limit"]))
        for option in ("band", "below", "span", "cases"):
            if was.get(option) != now.get(option):
                out.append(_change(f"{name} {option}", None, was.get(option), now.get(option)))
    return out


def _settings(old: SpecPart, new: SpecPart) -> list[Change]:
    if old.get("reference_step", 1.0) == new.get("reference_step", 1.0):
        return []
    return [_change("reference step", None, old.get("reference_step", 1.0), new.get("reference_step", 1.0))]
