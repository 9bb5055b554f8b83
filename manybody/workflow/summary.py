"""Text for people: what a plan holds, how a folder stands, and the table of gaps at the end of a run."""

from __future__ import annotations

import json
import math
from collections import Counter
from pathlib import Path

from manybody.workflow.costs import duration, gigabytes
from manybody.workflow.journal import LOCK, Journal
from manybody.workflow.lock import is_held, read_holder
from manybody.workflow.progress import progress_text
from manybody.workflow.tasks import FOLLOWS

ROWS = 40  # of the table of gaps; the file has all
LISTED = 50  # parts listed by `status`


def table(header: list[str], rows: list[list[str]], left: int = 1) -> str:
    """Columns as wide as needed, the first `left` of them flush left."""
    widths = [max(len(row[i]) for row in [header, *rows]) for i in range(len(header))]
    lines = []
    for row in [header, ["-" * width for width in widths], *rows]:
        cells = [
            cell.ljust(w) if i < left else cell.rjust(w) for i, (cell, w) in enumerate(zip(row, widths, strict=True))
        ]
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)


def plan_text(plan) -> str:
    """What `manybody plan` prints; see study.Plan."""
    study = plan.study
    undefined = sum(bool(point.undefined) for point in study.points)
    lines = [study.title] if study.title else []
    lines.append(
        f"{len(study.points)} points on {len(study.clusters)} clusters"
        + (f", {undefined} of them undefined" if undefined else "")
    )
    lines += [f"  {note}" for note in study.notes]
    if plan.reused:
        lines.append(f"{plan.reused} of {len(plan.tasks)} parts are finished already")
    if plan.counts:
        rows = []
        for kind, number in plan.counts.items():
            times = (duration(plan.seconds[kind]), duration(plan.longest[kind]))
            rows.append([kind, str(number), *times, gigabytes(plan.largest[kind])])
        lines += ["", table(["part", "number", "time", "longest", "memory"], rows), ""]
        where = f"{plan.workers} workers" if plan.workers > 1 else "one worker"
        basis = "from the times measured so far" if plan.calibrated else "uncalibrated: good to a factor of a few"
        lines.append(f"about {duration(plan.total_seconds)} on {where} ({basis})")
    else:
        lines.append("nothing is left to compute")
    if plan.refused:
        lines.append(f"{len(plan.refused)} parts would be refused:")
        lines += [f"  {task.label} ({task.kind}): {why}" for task, why in plan.refused[:LISTED]]
        if len(plan.refused) > LISTED:
            lines.append(f"  and {len(plan.refused) - LISTED} more")
        lines.append("Fewer workers leave more memory to each; sweeps respect [quantum] memory and max_bond.")
    return "\n".join(lines)


def status_text(folder) -> str:
    """What `manybody status` prints. Raises JournalError where the folder holds no study."""
    with Journal(folder, write=False) as journal:
        parts, entries, notes = journal.study(), journal.entries(), journal.notes()
    states = {key: entries[key].status if key in entries else "waiting" for key, *_ in parts}
    tally = Counter(states.values())
    lines = [notes["title"]] if notes.get("title") else []
    order = ("finished", "failed", "refused", "waiting")
    lines.append(", ".join(f"{tally[state]} {state}" for state in order if tally[state] or state == "finished"))
    kinds = list(dict.fromkeys(kind for _, kind, _ in parts))
    rows = []
    for kind in kinds:
        mine = [key for key, other, _ in parts if other == kind]
        count = Counter(states[key] for key in mine)
        spent = sum(entries[key].seconds for key in mine if key in entries)
        rows.append([kind, *(str(count[state]) for state in order), duration(spent)])
    if rows:
        lines += ["", table(["part", *order, "time spent"], rows)]
    for state in ("failed", "refused"):
        all_of_them = [(key, kind, label) for key, kind, label in parts if states[key] == state]
        found = [part for part in all_of_them if not entries[part[0]].message.startswith(FOLLOWS)]
        if all_of_them:
            following = len(all_of_them) - len(found)
            lines += ["", f"{state}:" if not following else f"{state} ({following} more only because they need these):"]
        for key, kind, label in found[:LISTED]:
            text = entries[key].message.splitlines()[0] if entries[key].message else ""
            lines.append(f"  {label} ({kind}): {text}")
        if len(found) > LISTED:
            lines.append(f"  and {len(found) - LISTED} more")
    lines += ["", *_activity(folder, notes, tally["waiting"])]
    return "\n".join(lines)


def _activity(folder, notes: dict, waiting: int) -> list[str]:
    path = Path(folder) / LOCK
    holder = read_holder(path)
    if holder is not None and not is_held(path):
        return [f"The last run (process {holder['pid']} on {holder.get('host')}) was killed; run again to go on."]
    if holder is None:
        return ["No run is going on." + (" `manybody run` goes on with what is waiting." if waiting else "")]
    lines = [f"A run is going on: process {holder['pid']} on {holder.get('host')}."]
    for label, kind, host, seconds, state in json.loads(notes.get("running", "[]")):
        told = f": {progress_text(state)}" if state else ""
        lines.append(f"  {label} ({kind}) on {host} for {duration(seconds)}{told}")
    return lines


def gap_table(tree, rows: int = ROWS) -> str:
    """One line per point of a dataset: lattice, sites, parameters, spin, rule, both energies, gap, flags."""
    from manybody.results.dataset import points_table

    names = ["classical_energy", "quantum_energy", "quantum_energy_error", "gap_per_site", "relative_gap"]
    frame = points_table(tree, [*names, "status", "classical_certified", "ladder"])
    dims = list(tree["status"].dims)
    shown = [name for name in dims if name in ("sites", "spin", "rule") or tree.sizes[name] > 1]
    unit = tree["gap"].attrs.get("units", "1")
    suffix = "" if unit == "1" else f" [{unit}]"
    header = [*shown, f"classical{suffix}", f"quantum{suffix}", "error", f"gap/site{suffix}", "relative gap", "flags"]
    lines = []
    for row in frame.head(rows).to_dict("records"):
        place = [_short(row[name]) for name in shown]
        values = [_number(row["classical_energy"], 7), _number(row["quantum_energy"], 7)]
        values += [_number(row["quantum_energy_error"], 1), _number(row["gap_per_site"], 5)]
        values += [_number(row["relative_gap"], 5), flags(row)]
        lines.append(place + values)
    text = table(header, lines, left=0)
    if len(frame) > rows:
        text += f"\nand {len(frame) - rows} more points in the file"
    return text


def flags(row: dict) -> str:
    """What a reader must know about a point before using it; "" where there is nothing."""
    found = []
    if row["status"] != "converged":
        found.append(row["status"].replace("_", " "))
    if row["status"] in ("converged", "not_converged"):
        if row["classical_certified"] != "yes":
            found.append("minimum not proved")
        if row["ladder"] == "violated":
            found.append("ladder violated")
    return ", ".join(found)


def _short(value) -> str:
    return value if isinstance(value, str) else f"{value:g}"


def _number(value: float, digits: int) -> str:
    if not math.isfinite(value):
        return "-"
    return f"{value:.{digits}f}" if digits > 1 and (value == 0 or 1e-3 < abs(value) < 1e6) else f"{value:.{digits}e}"
