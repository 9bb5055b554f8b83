"""Reads the tables that a workflow file names: pairs and positions, CSV with numbers only.

Lines that start with # are comments; the first other line names the columns. A message quotes no more than the
offending cell, so that a wrong path cannot carry the content of another file into a log.
"""

import csv
import io
import math
import re
from pathlib import Path

from manybody.model.lattice_table import PairTable, label_fault
from manybody.workflow.files import read_regular
from manybody.workflow.problems import Problem, nearest

MAX_BYTES = 64 * 2**20
MAX_SITE = 2_000_000
SHOWN = 10  # problems of one table that are listed

MATRIX = tuple(f"exchange_{a}{b}" for a in "xyz" for b in "xyz")
DIAGONAL = ("exchange_xx", "exchange_yy", "exchange_zz")
PAIR_COLUMNS = ("site_a", "site_b", "label", "exchange", *MATRIX)
POSITION_COLUMNS = ("site", "x", "y", "z")

_WHOLE = re.compile(r"[+-]?[0-9]{1,18}")
_NUMBER = re.compile(r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]{1,4})?")


class _Found:
    """Collects the problems of one table, the first few in full."""

    def __init__(self, name: str):
        self.name, self.problems, self.more = name, [], 0

    def add(self, wrong: str, remedy: str = "", line: int | None = None, column: str = "", cell: str = "") -> None:
        if len(self.problems) >= SHOWN:
            self.more += 1
            return
        place = self.name + (f" line {line}" if line else "") + (f", column {column}" if column else "")
        self.problems.append(Problem(place, _cell(cell), wrong, remedy))

    def all(self) -> list[Problem]:
        if self.more:
            return [*self.problems, Problem(self.name, "", f"{self.more} more problems of this table are not listed")]
        return self.problems


def read_pair_table(folder: Path, pairs: str, positions: str | None, sites: int | None):
    """(PairTable or None, problems) for the files named, looked up beside the workflow file."""
    found = _Found(pairs)
    listed = _pairs(folder, pairs, sites, found)
    problems = found.all()
    if positions is None:
        where = ()
    else:
        found = _Found(positions)
        least = sites or (1 + max((max(pair) for pair in listed["pairs"]), default=0) if listed else None)
        where = _positions(folder, positions, least, found)
        problems = problems + found.all()
    if problems or listed is None:
        return None, problems
    try:
        return PairTable(**listed, positions=where, sites=sites or 0), []
    except ValueError as error:  # what the checks above leave over
        return None, [Problem(pairs, "", str(error))]


def _pairs(folder: Path, name: str, sites: int | None, found: _Found) -> dict | None:
    rows = _rows(folder, name, PAIR_COLUMNS, ("site_a", "site_b"), found)
    if rows is None:
        return None
    header, lines = rows
    couplings = [column for column in header if column.startswith("exchange")]
    if couplings and not (couplings == ["exchange"] or set(couplings) in (set(MATRIX), set(DIAGONAL))):
        found.add(
            f"has the exchange columns {', '.join(couplings)}",
            "give exchange alone, or exchange_xx, exchange_yy, exchange_zz, or all nine of exchange_xx to exchange_zz",
        )
        return None
    pairs, labels, exchange, seen = [], [], [], {}
    for line, cells in lines:
        before = len(found.problems) + found.more
        i, j = (_site(cells[column], found, line, column, sites) for column in ("site_a", "site_b"))
        label = cells.get("label", "")
        if label and (reason := label_fault(label)):
            found.add(reason, "choose another label", line, "label", label)
        numbers = {column: _number(cells[column], found, line, column) for column in couplings}
        if len(found.problems) + found.more > before:
            continue
        if i == j:
            found.add("joins a site with itself", "remove the line", line, "site_b", cells["site_b"])
            continue
        key = (min(i, j), max(i, j), label)
        if key in seen:
            under = f" under label {_cell(label)}" if label else ""
            found.add(
                f"lists the sites {key[0]} and {key[1]} again{under}; line {seen[key]} has them",
                "list a pair once, in one order, or under another label",
                line,
            )
            continue
        seen[key] = line
        pairs.append((i, j))
        labels.append(label)
        if couplings == ["exchange"]:
            exchange.append(tuple(numbers["exchange"] if k % 4 == 0 else 0.0 for k in range(9)))
        elif couplings:
            exchange.append(tuple(numbers.get(column, 0.0) for column in MATRIX))
    if not lines and not found.problems:
        found.add("lists no pair", "write one pair of sites a line")
    if found.problems:
        return None
    return {"pairs": tuple(pairs), "labels": tuple(labels) if any(labels) else (), "exchange": tuple(exchange)}


def _positions(folder: Path, name: str, sites: int | None, found: _Found) -> tuple:
    rows = _rows(folder, name, POSITION_COLUMNS, POSITION_COLUMNS, found)
    if rows is None:
        return ()
    where = {}
    for line, cells in rows[1]:
        site = _site(cells["site"], found, line, "site", sites)
        numbers = tuple(_number(cells[axis], found, line, axis) for axis in "xyz")
        if site is None or None in numbers:
            continue
        if site in where:
            found.add("lists this site again", "give each site one line", line, "site", cells["site"])
        where[site] = numbers
    if not found.problems and sites is not None:
        missing = next((site for site in range(sites) if site not in where), None)
        if missing is not None:
            found.add(f"has no position for site {missing}", f"list the sites 0 to {sites - 1}")
    return tuple(where[site] for site in sorted(where))


def _rows(folder: Path, name: str, allowed, needed, found: _Found):
    """(header, [(line number, {column: cell})]) or None, with the problem noted."""
    text = _text(folder, name, found)
    if text is None:
        return None
    header, rows = None, []
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    try:
        for cells in reader:
            line = reader.line_num
            if not cells or cells[0].lstrip().startswith("#") or not any(cell.strip() for cell in cells):
                continue
            cells = [cell.strip() for cell in cells]
            if header is None:
                header = cells
                for column in dict.fromkeys(header):
                    if column not in allowed:
                        found.add("is no column of this table", nearest(column, allowed), line, cell=column)
                    elif header.count(column) > 1:
                        found.add("names a column twice", "name each column once", line, cell=column)
                for column in needed:
                    if column not in header:
                        found.add(f"the column {column} is missing", f"the first line names {', '.join(needed)}", line)
                if found.problems:
                    return None
            elif len(cells) != len(header):
                found.add(f"has {len(cells)} cells for {len(header)} columns", "give every column a cell", line)
            else:
                rows.append((line, dict(zip(header, cells, strict=True))))
    except csv.Error:
        found.add("is no CSV from here on", "separate cells by commas, without loose quotation marks", reader.line_num)
        return None
    if header is None:
        found.add("is empty", f"the first line names the columns {', '.join(needed)}")
        return None
    return header, rows


def _text(folder: Path, name: str, found: _Found) -> str | None:
    """Content of a regular .csv file of bounded size, or None with the problem noted."""
    if not name.lower().endswith(".csv") or "\0" in name:
        found.add("is not the name of a .csv file", "tables are read from files that end in .csv")
        return None
    content, fault = read_regular(folder / name, MAX_BYTES)
    if fault:
        found.add(fault, "name a CSV file, by its path relative to the workflow file")
        return None
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError:
        found.add("is not UTF-8 text", "save the table as UTF-8")
        return None


def _site(cell: str, found: _Found, line: int, column: str, sites: int | None) -> int | None:
    if not _WHOLE.fullmatch(cell):
        found.add("is no site number", "sites are whole numbers from 0", line, column, cell)
    elif int(cell) < 0:
        found.add("is negative", "sites are counted from 0", line, column, cell)
    elif sites is not None and int(cell) >= sites:
        found.add(
            f"does not exist: sites run from 0 to {sites - 1}", "correct it or the number of sites", line, column, cell
        )
    elif int(cell) >= MAX_SITE:
        found.add(f"is beyond the {MAX_SITE} sites allowed", "number the sites without gaps", line, column, cell)
    else:
        return int(cell)
    return None


def _number(cell: str, found: _Found, line: int, column: str) -> float | None:
    if cell.lower().lstrip("+-") in ("nan", "inf", "infinity"):
        found.add("is not finite", "give a finite number", line, column, cell)
    elif not _NUMBER.fullmatch(cell):
        found.add("is no number" if cell else "is empty", "tables hold plain numbers", line, column, cell)
    elif not math.isfinite(float(cell)):
        found.add("is not finite", "give a finite number", line, column, cell)
    else:
        return float(cell)
    return None


def _cell(cell: str) -> str:
    if not cell:
        return ""
    text = "".join(c if c.isprintable() else "?" for c in cell[:40])
    return f'"{text}"' + (" ..." if len(cell) > 40 else "")
