"""The [lattice] blocks of a workflow file as lattices, one for each size."""

import math
from pathlib import Path

from manybody.model.lattice import BY_SITES, DIMENSIONS, Lattice, lattice
from manybody.workflow import schema
from manybody.workflow.found import Found
from manybody.workflow.tables import read_pair_table

MAX_SIZES = 10_000


def read_lattices(data: dict, folder: Path, found: Found) -> tuple[tuple[str, tuple[Lattice, ...]], ...]:
    """(name, lattices) for each block; `found` takes the problems. Faulty blocks are left out."""
    raw = data.get("lattice")
    if raw is None:
        found.add((), "there is no lattice", 'add [lattice] with, for example, shape = "chain" and sites = [4, 6, 8]')
        return ()
    if not isinstance(raw, list):
        block, bad = found.block(schema.LatticeBlock, ("lattice",))
        sizes = _sizes(block, bad, ("lattice",), folder, found)
        return (("", sizes),) if sizes else ()
    if not raw:
        found.add(("lattice",), "is empty", "add a [lattice] block")
    names, result = {}, []
    for index in range(len(raw)):
        path = ("lattice", index)
        block, bad = found.block(schema.LatticeBlock, path)
        if len(raw) > 1 and block.name is None and "name" not in bad:
            found.add(path, "has no name", "several lattices in one study each need a name", value=None)
        if block.name is not None and block.name in names:
            found.add((*path, "name"), f"is the name of lattice {names[block.name] + 1} already", "choose another")
        names.setdefault(block.name, index)
        sizes = _sizes(block, bad, path, folder, found)
        if sizes:
            result.append((block.name or "" if len(raw) > 1 else "", sizes))
    return tuple(result)


def _sizes(block, bad: frozenset[str], path: tuple, folder: Path, found: Found) -> tuple[Lattice, ...]:
    shape, given = block.shape, block.model_fields_set | bad
    if shape is None:
        if "shape" not in bad:
            found.add(path, "has no shape", f"give one of {', '.join(schema.SHAPES)}", value=None)
        return ()
    size = "sites" if shape in BY_SITES else "extent"
    allowed = {"shape", "name", "pairs", "positions", "sites"} if shape == "table" else {"shape", "name", size}
    if shape not in ("table", "complete", "star", "bipartite"):
        allowed.add("periodic")
    for key in ("sites", "extent", "periodic", "pairs", "positions"):
        if key in given - allowed:
            found.add(
                (*path, key), f'does not go with shape = "{shape}"', f"this shape takes {', '.join(sorted(allowed))}"
            )
    if shape == "table":
        return _table(block, bad, path, folder, found)
    if size not in given:
        example = "sites = [4, 6]" if size == "sites" else f"extent = {[4] * DIMENSIONS[shape]}"
        found.add(path, f"has no {size}", f"give its size, for example {example}", value=None)
    values = getattr(block, size)
    if values is None or bad & allowed:
        return ()
    if shape == "ring" and "periodic" in given and block.periodic not in (True, (True,)):
        found.add((*path, "periodic"), "contradicts the ring, which is the periodic chain", 'use shape = "chain"')
        return ()
    periodic = block.periodic if "periodic" in allowed else False
    if size == "sites" and isinstance(periodic, tuple):
        if len(periodic) != 1:
            found.add((*path, "periodic"), f"has {len(periodic)} entries for 1 direction", "write true or false")
            return ()
        periodic = periodic[0]
    return _each_size(shape, size, values, periodic, (*path, size), found)


def _each_size(shape: str, size: str, values: tuple, periodic, path: tuple, found: Found) -> tuple[Lattice, ...]:
    raw = found.raw(path)
    listed = isinstance(raw, list) and (size == "sites" or isinstance(raw[0], list))
    if len(values) > MAX_SIZES:
        found.add(path, f"lists {len(values)} sizes", f"at most {MAX_SIZES} are allowed", value=None)
        return ()
    lattices, sites, clean = [], {}, True
    for index, value in enumerate(values):
        at = (*path, index) if listed else path
        try:
            # Before anything is made: an extent may multiply to an absurd number.
            if size == "extent" and math.prod(value) > schema.MAX_SITES:
                raise ValueError(f"has {math.prod(value)} cells; at most {schema.MAX_SITES} sites are allowed")
            made = lattice(shape, **{size: value}, periodic=periodic)
            if made.sites > schema.MAX_SITES:
                raise ValueError(f"has {made.sites} sites; at most {schema.MAX_SITES} are allowed")
        except ValueError as error:
            found.add(at, str(error), "correct the size")
            clean = False
            continue
        if made.sites in sites:
            found.add(
                at,
                f"has {made.sites} sites, as entry {sites[made.sites] + 1} has",
                "sizes in one block differ in their number of sites; put the other into a second [[lattice]] block",
            )
            clean = False
        sites.setdefault(made.sites, index)
        lattices.append(made)
    return tuple(lattices) if clean else ()


def _table(block, bad: frozenset[str], path: tuple, folder: Path, found: Found) -> tuple[Lattice, ...]:
    if block.pairs is None:
        if "pairs" not in bad:
            found.add(path, "names no table", 'give pairs = "name.csv", with the columns site_a and site_b', value=None)
        return ()
    sites = None
    if block.sites is not None:
        if len(block.sites) > 1:
            found.add((*path, "sites"), "lists several sizes", "a table has one number of sites")
            return ()
        sites = block.sites[0]
    table, problems = read_pair_table(folder, block.pairs, block.positions, sites)
    for problem in problems:
        key = "positions" if block.positions and problem.place.startswith(block.positions) else "pairs"
        found.add_problem(problem, (*path, key))
    return (Lattice("table", (), (), table),) if table is not None and not bad else ()
