"""Campaigns that can be broken off: one JSON line for each finished case; those in the file are not run again."""

import argparse
import json
import os
from collections.abc import Callable, Iterable
from concurrent.futures import ProcessPoolExecutor, as_completed
from pathlib import Path


def read_records(path: Path) -> dict[int, dict]:
    """Finished cases by number. A line cut short by an interruption is left out, so that its case runs again."""
    records = {}
    if path.exists():
        for line in path.read_text().splitlines():
            try:
                record = json.loads(line)
            except json.JSONDecodeError:
                continue
            records[record["case"]] = record
    return records


def run_cases(
    function: Callable[[int], dict], cases: Iterable[int], path: Path, workers: int
) -> dict[int, dict]:
    """Run the cases that the file does not hold yet and append each as it is done.

    `function` maps the number of a case to its record, a pure function; the results do not depend on `workers`.
    """
    wanted = list(cases)
    done = read_records(path)
    missing = [case for case in wanted if case not in done]
    path.parent.mkdir(parents=True, exist_ok=True)
    if path.exists() and path.read_bytes()[-1:] not in (b"", b"\n"):
        path.write_bytes(path.read_bytes() + b"\n")  # a line cut short must not swallow the next one
    with path.open("a") as out:
        for record in _records(function, missing, workers):
            out.write(json.dumps(record) + "\n")
            out.flush()
            done[record["case"]] = record
            print(f"case {record['case']} done, {len(done)} in the file", flush=True)
    return {case: done[case] for case in wanted}


def _records(function, cases, workers):
    if workers == 1:
        yield from map(function, cases)
        return
    with ProcessPoolExecutor(workers) as executor:
        futures = [executor.submit(function, case) for case in cases]
        for future in as_completed(futures):
            yield future.result()


def parser(description: str, n_cases: int) -> argparse.ArgumentParser:
    """Options that all campaigns share."""
    options = argparse.ArgumentParser(description=description)
    options.add_argument(
        "--out", type=Path, required=True, help="JSON lines file; finished cases are skipped"
    )
    options.add_argument("--workers", type=int, default=1, choices=(1, 2), help="processes")
    options.add_argument(
        "--cases", type=int, default=n_cases, help=f"run the first of the {n_cases} cases only"
    )
    options.add_argument("--figure", type=Path, help="PNG file to draw")
    return options


def one_thread() -> None:
    """Say so where linear algebra would use several threads a process: it slows small matrices down."""
    if os.environ.get("OMP_NUM_THREADS") != "1":
        print("Set OMP_NUM_THREADS=1: linear algebra in several threads is slower here.")
