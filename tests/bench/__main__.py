"""python -m tests.bench: run families of known truth through the estimator and print the table."""

from __future__ import annotations

import os

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"  # before numpy is imported: one thread a worker, or two workers fight over the cores

import argparse  # noqa: E402
import importlib  # noqa: E402
import json  # noqa: E402
import multiprocessing  # noqa: E402
import sys  # noqa: E402
import time  # noqa: E402
from typing import Any  # noqa: E402

from tests.bench import families, table  # noqa: E402
from tests.bench.clutter import NoRecordingsError  # noqa: E402
from tests.bench.judge import judge  # noqa: E402


def load_measure(place: str) -> Any:
    """`measure(samples, rate)` from 'module:function'; a function that takes settings gets the clock's part switched off."""
    module, _, name = place.partition(":")
    function = getattr(importlib.import_module(module), name)
    from qmeter.estimate.modes import Settings

    return lambda samples, rate: function(samples, rate, Settings(clock_ppm=0.0))


def work(task: tuple[str, int, int, str]) -> tuple[str, int, dict[str, Any]]:
    """One case in a worker."""
    family, seed, index, place = task
    return family, seed, judge(families.case(family, seed, index), load_measure(place))


def arguments() -> argparse.Namespace:
    """The command line."""
    parser = argparse.ArgumentParser(prog="python -m tests.bench", description="Known truth through the estimator, as a table.")
    parser.add_argument("family", nargs="*", help=f"{', '.join(families.NAMES)}; also: simple, all, speed, fuzz (default: all)")
    parser.add_argument("--seed", type=int, nargs="+", default=[1, 2, 3])
    parser.add_argument("--count", type=int, help="cases a family and seed (default: 2000 or 500)")
    parser.add_argument("--only", type=int, nargs="+", metavar="INDEX", help="just these cases")
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--json", help="write every judged case to this file")
    parser.add_argument("--worst", type=int, default=0, metavar="K", help="print the K worst modes of each family")
    parser.add_argument("--split", action="store_true", help="clutter: also a row for each recording")
    parser.add_argument("--estimator", default="qmeter.estimate.measure:measure_samples", help="module:function under test")
    return parser.parse_args()


def chosen_families(words: list[str]) -> list[str]:
    """Families named on the command line, in the table's order."""
    wanted: set[str] = set()
    for word in words or ["all"]:
        wanted |= {"all": set(families.NAMES), "simple": set(families.SIMPLE)}.get(word, {word})
    unknown = wanted - set(families.NAMES)
    if unknown:
        sys.exit(f"unknown family {', '.join(sorted(unknown))}; there are {', '.join(families.NAMES)}")
    return [name for name in families.NAMES if name in wanted]


def run_family(family: str, options: argparse.Namespace, pool: Any) -> dict[int, list[dict[str, Any]]]:
    """Every judged case, by seed, in the order of the index."""
    count = options.count or families.COUNTS.get(family, 500)
    indices = options.only or range(count)
    tasks = [(family, seed, index, options.estimator) for seed in options.seed for index in indices]
    records: dict[int, list[dict[str, Any]]] = {seed: [] for seed in options.seed}
    results = map(work, tasks) if pool is None else pool.imap_unordered(work, tasks, chunksize=max(1, min(8, len(tasks) // 16)))
    for done, (_, seed, record) in enumerate(results, 1):
        records[seed].append(record)
        if sys.stderr.isatty() and done % 20 == 0:
            print(f"\r{family}: {done} of {len(tasks)}", end="", file=sys.stderr, flush=True)
    for listed in records.values():
        listed.sort(key=lambda r: r["index"])
    return records


def show_family(family: str, records: dict[int, list[dict[str, Any]]], options: argparse.Namespace) -> int:
    """Print the family's rows; returns the floors missed."""
    groups = {seed: table.by_group(family, listed) for seed, listed in records.items()}
    names = list(dict.fromkeys(name for split in groups.values() for name in split))
    missed = 0
    for name in names:
        missed += table.print_row(name, {s: table.summarise(family, split[name]) for s, split in groups.items() if name in split})
    everything = [r for listed in records.values() for r in listed]
    if options.split:
        for file in sorted({str(r["notes"]["file"]) for r in everything if "file" in r["notes"]}):
            mine = [r for r in everything if r["notes"].get("file") == file]
            table.print_row(f"{family} in {file}", {0: table.summarise(family, mine)})
    if options.worst:
        table.print_worst(everything, family, options.worst)
    return missed


def main() -> int:
    """Run and print; exit status 1 when a floor is missed."""
    options = arguments()
    if options.family[:1] in (["speed"], ["fuzz"]):
        module = importlib.import_module(f"tests.bench.{options.family[0]}")
        return int(module.main() or 0)
    pool = multiprocessing.Pool(options.jobs) if options.jobs > 1 else None
    missed, kept = 0, {}
    for family in chosen_families(options.family):
        started = time.perf_counter()
        try:
            records = run_family(family, options, pool)
        except NoRecordingsError as error:
            print(f"\n{family}   NOT RUN: {error}   <-- missed")
            missed += 1
            continue
        missed += show_family(family, records, options)
        kept[family] = records
        print(f"  ({time.perf_counter() - started:.0f} s)", flush=True)
    if pool is not None:
        pool.close()
    if options.json:
        with open(options.json, "w", encoding="utf-8") as out:
            json.dump(kept, out)
    print(f"\n{missed} floors missed" if missed else "\nevery floor holds")
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
