"""Turn the JSON of a benchmark run into the README's table, and keep the run's figures.

    pytest bench --benchmark-json=run.json && python bench/table.py run.json

Prints the table as Markdown and appends one line to ``bench/history.jsonl``, unless the run was a
quick one or ``--no-history`` is given. A ratio of a full run that is more than a fifth below that
of the last entry of the same machine is named, and the exit status is then 1.
"""

import argparse
import json
import sys
from pathlib import Path

HISTORY = Path(__file__).with_name("history.jsonl")
FALL = 0.8  # of the last ratio: below it a case is named
COLUMNS = (
    "work", "size", "compiled", "plain NumPy", "ratio", "differ by", "error against exact flow"
)


def main(arguments=None):
    """Print the table; returns the exit status."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("run", type=Path, help="what pytest --benchmark-json wrote")
    parser.add_argument("--no-history", action="store_true", help="leave the history file alone")
    options = parser.parse_args(arguments)
    try:
        run = read(options.run)
        history = [json.loads(line) for line in lines_of(HISTORY)]
    except (OSError, ValueError, KeyError) as error:
        print(f"no table: {error!r}; is {options.run} a run of this folder's benchmarks?",
              file=sys.stderr)
        return 2
    print(markdown(run))
    same = [entry for entry in history if entry["machine"] == run["machine"]]
    last = [] if run["quick"] else same[-1:]   # a quick run's sizes are others
    falls = [line for entry in last for line in fallen(run, entry)]
    for line in falls:
        print(line, file=sys.stderr)
    if not (options.no_history or run["quick"]):
        with HISTORY.open("a") as file:
            file.write(json.dumps(kept(run)) + "\n")
    return 1 if falls else 0


def lines_of(path):
    """The lines of a text file, none if there is no such file."""
    return path.read_text().splitlines() if path.exists() else []


def read(path):
    """The cases of a run, with its machine, commit and date."""
    data = json.loads(path.read_text())
    machine = dict(data["machine_info"]["offbody"])
    cases = {b["name"]: b["extra_info"] for b in data["benchmarks"] if "ratio" in b["extra_info"]}
    if not cases:
        raise ValueError("no case with a ratio")
    return {
        "date": data["datetime"][:19], "commit": data["commit_info"].get("id"),
        "dirty": data["commit_info"].get("dirty"), "quick": machine.pop("quick"),
        "machine": machine, "cases": cases,
    }


def kept(run):
    """What the history keeps of a run."""
    names = ("ratio", "compiled", "reference", "difference", "error")
    cases = {
        name: {key: case[key] and float(f"{case[key]:.4g}") for key in names}
        for name, case in run["cases"].items()
    }
    return {key: run[key] for key in ("date", "commit", "dirty", "machine")} | {"cases": cases}


def fallen(run, last):
    """A line for each ratio that fell by more than a fifth since an entry of the history."""
    for name, case in run["cases"].items():
        before = last["cases"].get(name, {}).get("ratio", 0.0)
        if case["ratio"] < FALL * before:
            yield f"{name}: ratio fell from {before:.3g} ({last['date']}) to {case['ratio']:.3g}"


def markdown(run):
    """The table, and a line that names the machine."""
    rows = [COLUMNS, ("---",) * len(COLUMNS)]
    for case in run["cases"].values():
        part = "" if case["part"] == 1 else f" (from {100 * case['part']:.2g}% of the work)"
        error = "" if case["error"] is None else f"{case['error']:.0e}"
        rows.append((
            case["work"], case["size"], duration(case["compiled"]),
            duration(case["reference"]) + part, f"{case['ratio']:.3g}",
            f"{case['difference']:.0e}", error,
        ))
    machine = run["machine"]
    table = "\n".join("| " + " | ".join(row) + " |" for row in rows)
    return (
        f"{table}\n\n{machine['processor']}, {machine['instructions']}, {machine['cores']} cores, "
        f"NumPy {machine['numpy']}; {run['date'][:10]}."
    )


def duration(seconds):
    """Seconds in a unit that suits them.

    >>> duration(0.01234)
    '12.3 ms'
    """
    for unit, size in (("s", 1.0), ("ms", 1e-3)):
        if seconds >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds / 1e-6:.3g} µs"


if __name__ == "__main__":
    sys.exit(main())
