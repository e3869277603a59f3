"""Print every benchmark table, with the machine and the versions on top.

    python benchmarks/run.py                  all tables (about eight minutes)
    python benchmarks/run.py core             those of bench_core.py alone
    python benchmarks/run.py --full           the long questions too (an hour)
    python benchmarks/run.py --sheets DIR     a long independent search against ours on the sheets of a folder
    python benchmarks/run.py --json PATH      and write the figures to a file

One core: numerical libraries are held to one thread. Only ratios within one run mean anything.
"""

from __future__ import annotations

import argparse
import importlib
import json
import os
import platform
import sys
import time
from functools import partial
from pathlib import Path

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE), str(HERE.parent)]


def machine() -> dict[str, str]:
    """Processor, cores and versions."""
    from importlib.metadata import version

    model = ""
    info = Path("/proc/cpuinfo")
    if info.exists():
        names = [
            line.split(":", 1)[1].strip()
            for line in info.read_text().splitlines()
            if line.startswith("model name")
        ]
        model = names[0] if names else ""
    facts = {
        "date": time.strftime("%Y-%m-%d"),
        "processor": model or platform.processor() or platform.machine(),
        "cores": str(os.cpu_count()),
        "system": f"{platform.system()} {platform.machine()}",
        "python": platform.python_version(),
    }
    return facts | {name: version(name) for name in ("numpy", "scipy", "optuna")}


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", help="which files, bench_<name>.py; all when none is named")
    parser.add_argument("--json", type=Path, metavar="PATH", help="write machine and tables to this file")
    parser.add_argument("--full", action="store_true", help="answer the long questions too")
    parser.add_argument(
        "--sheets",
        type=Path,
        metavar="DIR",
        help="a long independent search against ours on these alone",
    )
    options = parser.parse_args()
    there = sorted(path.stem.removeprefix("bench_") for path in HERE.glob("bench_*.py"))
    unknown = sorted(set(options.names) - set(there))
    if unknown:
        parser.error(f"no benchmark named {', '.join(unknown)}; there are {', '.join(there)}")
    facts = machine()
    print(", ".join(f"{key} {value}" for key, value in facts.items()), end="\n\n")
    record: dict[str, object] = {"machine": facts, "tables": []}
    for name in ["global"] if options.sheets else options.names or there:
        module = importlib.import_module(f"bench_{name}")
        questions = [*module.QUESTIONS, *(getattr(module, "LONG", ()) if options.full else ())]
        if options.sheets:
            questions = [partial(module.on_sheets, options.sheets)]
        for question in questions:
            table = question()
            print(table.text(), end="\n\n", flush=True)
            record["tables"].append(  # type: ignore[attr-defined]
                {
                    "file": f"bench_{name}.py",
                    "title": table.title,
                    "columns": table.columns,
                    "rows": table.rows,
                }
            )
            if options.json:  # after every table: a run that is stopped leaves what it has
                options.json.write_text(json.dumps(record, indent=1, allow_nan=True) + "\n", encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
