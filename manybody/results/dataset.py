"""Records to a labelled xarray tree, to a netCDF file, and back.

A record is a plain dict for one point: `lattice` (str, may be left out), `sites`, `spin`, `rule`, `parameters` (dict
of floats) and variables of schema.VARIABLES by name. A record without spin and rule carries only what belongs to a
cluster. Points that a study should hold but that have no record, and variables missing from a record, become NaN, "" or
"unknown".

Energies are totals in the user's unit, normalized as the energy function on unit vectors (no factor S^2).
"""

import contextlib
import datetime
import itertools
import json
import os
import tempfile
from pathlib import Path

import numpy as np

from manybody.results import derived
from manybody.results.schema import COMPONENTS, CONVENTIONS, GROUPS, POINT_KEYS, VARIABLES, Variable

FILE_NAME = "results.nc"
_COORDINATES = {
    "lattice": {"long_name": "name of the lattice"},
    "sites": {"long_name": "number of sites", "units": "1"},
    "spin": {"long_name": "spin quantum number S", "units": "1"},
    "rule": {"long_name": "quantization rule"},
    "site": {"long_name": "site number, from 0", "units": "1"},
    "other_site": {"long_name": "site number of the partner, from 0", "units": "1"},
    "component": {"long_name": "Cartesian component"},
    "place": {"long_name": "place in the order of the cuts, from 0", "units": "1"},
    "cut": {"long_name": "cut between neighbouring positions, from 0", "units": "1"},
    "stage": {"long_name": "stage of the quantum branch, from 0", "units": "1"},
}
_SHARED = {"classical_energy", "quantum_energy"}


def records_to_tree(records, attrs=None):
    """Build the DataTree: points at the root, one group per kind of array (schema.GROUPS), derived variables filled in.

    attrs: global attributes (title, workflow text, versions, ...). `energy_unit` is the user's unit (default "1").
    `term_keys` (list of the energy function's group keys, each a list of [rank, degree] per site) tells figures and
    report whether another normalization of the energies makes sense.
    Raises ValueError for no records, an unknown key, a point given twice, contradicting values of one cluster.
    """
    import xarray as xr

    records = [_checked(record) for record in records]
    if not records:
        raise ValueError("no records: a dataset needs at least one point")
    attrs = dict(attrs or {})
    unit = attrs.setdefault("energy_unit", "1")
    axes = _axes(records)
    places = _places(records, axes)
    root = _root(records, axes, places, unit)
    root = derived.fill(root, unit)
    root.attrs = encode_attrs(
        {"title": "", "date_created": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds")}
        | attrs
        | {"Conventions": CONVENTIONS}
    )
    groups = {"/": root}
    for name in GROUPS:
        group = _group(name, records, axes, places, unit)
        if group is not None:
            groups[f"/{name}"] = group
    return xr.DataTree.from_dict(groups)


def write_results(path, records, attrs=None, scaling=True):
    """Write records as one netCDF file, with the fits of scaling.py unless told not to; returns the tree."""
    tree = records_to_tree(records, attrs)
    if scaling:
        from manybody.results.scaling import scaling_dataset

        fits = scaling_dataset(tree)
        if fits.data_vars:
            tree["scaling"] = type(tree)(fits)
    write_tree(path, tree)
    return tree


def write_tree(path, tree):
    """Replace `path` by the tree as netCDF, at once: a reader sees the old file or the new one, never a part.

    The file is made in memory and then written, so that a full disk is an ordinary OSError and the old file stays.
    """
    path = Path(path)
    content = tree.to_netcdf(engine="h5netcdf", encoding=_encoding(tree), write_inherited_coords=True)
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, path)
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(temporary)
        raise
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)


def open_results(path):
    """The labelled tree of a results file, or of the folder that holds `results.nc`, loaded into memory.

    Raises FileNotFoundError, or ValueError where the file is not one of ours.
    """
    import xarray as xr

    path = Path(path)
    if path.is_dir():
        path = path / FILE_NAME
    if not path.is_file():
        raise FileNotFoundError(f"no results at {path}: run the workflow first, or name its output folder")
    try:
        with xr.open_datatree(path, engine="h5netcdf") as file:
            tree = file.load()
    except OSError as error:
        raise ValueError(f"{path} cannot be read as netCDF: {error}") from error
    missing = {"sites", "spin", "rule"} - set(tree.coords) | (_SHARED - set(tree.data_vars))
    if missing:
        raise ValueError(f"{path} is no results file of a study: it has no {', '.join(sorted(missing))}")
    return tree


def points_table(tree, variables=None):
    """A pandas table, one row per point of the study, flags as words; absent points left out.

    variables: names of root variables without further dimensions (default: all). Energies keep the file's unit.
    """
    root = tree.dataset if hasattr(tree, "dataset") else tree
    names = list(variables or root.data_vars)
    chosen = root[list(dict.fromkeys([*names, "status"]))]
    frame = chosen.to_dataframe(dim_order=list(root["status"].dims)).reset_index()
    frame = frame[frame["status"] != -1]
    for name in names:
        if "flag_values" in root[name].attrs:
            frame[name] = flag_words(root[name], frame[name])
    return frame[[*root["status"].dims, *names]].reset_index(drop=True)


def flag_words(variable, values=None):
    """Words of a flag variable, from its own CF attributes: numpy array of str shaped like the values."""
    words = dict(
        zip(np.atleast_1d(variable.attrs["flag_values"]), variable.attrs["flag_meanings"].split(), strict=True)
    )
    values = np.asarray(variable if values is None else values)
    return np.array([words[value] for value in values.ravel()], dtype=object).reshape(values.shape)


def encode_attrs(attrs) -> dict:
    """Attributes that netCDF can hold: bool to 0/1, None left out, dicts and nested or mixed lists to JSON text."""
    encoded = {}
    for key, value in attrs.items():
        if isinstance(value, (bool, np.bool_)):
            encoded[key] = int(value)
        elif isinstance(value, (str, int, float, np.integer, np.floating)):
            encoded[key] = value
        elif isinstance(value, np.ndarray) and value.dtype.kind in "iuf":
            encoded[key] = np.atleast_1d(value) if value.ndim < 2 else json.dumps(value.tolist())
        elif isinstance(value, (list, tuple)) and value and all(type(v) in (int, float) for v in value):
            encoded[key] = list(value)
        elif isinstance(value, (list, tuple, dict)):
            encoded[key] = json.dumps(value)
        elif value is not None:
            raise ValueError(f"attribute {key}: a {type(value).__name__} cannot be stored in netCDF")
    return encoded


def _checked(record):
    unknown = set(record) - set(POINT_KEYS) - set(VARIABLES)
    if unknown:
        raise ValueError(f"{sorted(unknown)[0]!r} is no dataset variable; those are listed in results/schema.py")
    return record


def _is_point(record):
    return record.get("spin") is not None and record.get("rule") is not None


def _axes(records):
    """Coordinate values of every dimension, in the order of the dataset's dimensions."""
    names = sorted({len(r.get("parameters") or {}) for r in records})
    if len(names) != 1:
        raise ValueError("records do not all have the same parameters")
    parameters = list(records[0].get("parameters") or {})
    if any(set(r.get("parameters") or {}) != set(parameters) for r in records):
        raise ValueError("records do not all have the same parameters")
    lattices = list(dict.fromkeys(r.get("lattice") or "" for r in records))
    axes = {"lattice": lattices} if any(lattices) else {}
    axes["sites"] = sorted({int(r["sites"]) for r in records})
    for name in parameters:
        axes[name] = sorted({float(r["parameters"][name]) for r in records})
    points = [r for r in records if _is_point(r)]
    axes["spin"] = sorted({float(r["spin"]) for r in points})
    axes["rule"] = list(dict.fromkeys(r["rule"] for r in points))
    return axes


def _places(records, axes):
    """Index tuples of every record: (lattice-like, cluster, point or None)."""
    number = {name: {value: k for k, value in enumerate(values)} for name, values in axes.items()}
    places, seen = [], set()
    for record in records:
        geometry = (number["sites"][int(record["sites"])],)
        if "lattice" in axes:
            geometry = (number["lattice"][record.get("lattice") or ""], *geometry)
        parameters = record.get("parameters") or {}
        cluster = geometry + tuple(number[name][float(parameters[name])] for name in axes if name in parameters)
        point = by_rule = None
        if _is_point(record):
            point = (*cluster, number["spin"][float(record["spin"])], number["rule"][record["rule"]])
            by_rule = (*cluster, point[-1])
            if point in seen:
                raise ValueError(
                    f"two records for sites {record['sites']}, spin {record['spin']}, rule {record['rule']}, "
                    f"parameters {parameters}"
                )
            seen.add(point)
        places.append({"lattice": geometry, "cluster": cluster, "point": point, "rule": by_rule})
    return places


def _dims(axes, per):
    names = list(axes)
    if per == "point":
        return names
    if per == "cluster":
        return names[:-2]
    if per == "rule":
        return [*names[:-2], "rule"]
    return [n for n in ("lattice", "sites") if n in axes]


def _coordinates(axes):
    coords = {}
    for name, values in axes.items():
        dtype = {"sites": np.int64, "lattice": object, "rule": object}.get(name, float)
        attrs = _COORDINATES.get(name, {"long_name": f"parameter {name}", "units": "1"})
        coords[name] = (name, np.array(values, dtype=dtype), attrs)
    return coords


def _root(records, axes, places, unit):
    import xarray as xr

    variables = {}
    for variable in VARIABLES.values():
        if variable.group or variable.derived:
            continue
        variables[variable.name] = _filled(variable, records, axes, places, (), unit)
    dims, status, attrs = variables["status"]
    for index, record in ((place["point"], record) for place, record in zip(places, records) if place["point"]):
        if "status" not in record and "quantum_energy" in record:
            raise ValueError(f"a record with a quantum energy has no status: {_name(record)}")
        if "status" not in record:
            status[index] = VARIABLES["status"].flag_value("waiting")
    _mark_waiting(status, axes, places)
    variables["status"] = (dims, status, attrs)
    for name in ("quantum_energy", "classical_energy"):
        ancillary = {"quantum_energy": "quantum_energy_error status", "classical_energy": "classical_energy_bound"}
        variables[name][2]["ancillary_variables"] = ancillary[name]
    return xr.Dataset(variables, coords=_coordinates(axes))


def _mark_waiting(status, axes, places):
    """Points without a record wait, except where a lattice has no cluster of that size: those are absent."""
    present = {place["lattice"] for place in places}
    shape = [len(axes[name]) for name in _dims(axes, "lattice")]
    for index in itertools.product(*(range(n) for n in shape)):
        if index in present:
            block = status[index]
            block[block == -1] = VARIABLES["status"].flag_value("waiting")


def _name(record):
    return ", ".join(f"{key} {record[key]}" for key in POINT_KEYS if record.get(key))


def _filled(variable: Variable, records, axes, places, lengths, unit):
    """(dims, array, attrs) of one variable, every record's value at its place; `lengths` pads the inner dimensions."""
    dims = [*_dims(axes, variable.per), *variable.dims]
    shape = [len(axes[name]) for name in _dims(axes, variable.per)] + list(lengths)
    dtype, fill = {
        "float": (float, np.nan),
        "count": (float, np.nan),
        "index": (np.int32, -1),
        "flag": (np.int8, -1),
        "text": (object, ""),
    }[variable.dtype]
    array = np.full(shape, fill, dtype=dtype)
    given = {}
    for record, place in zip(records, places):
        index = place[variable.per]
        value = record.get(variable.name)
        if index is None or value is None:
            continue
        if index in given:
            earlier = given[index]
            if earlier is not value and not _same(earlier, value):
                raise ValueError(f"two different values of {variable.name} for one cluster ({_name(record)})")
            continue
        given[index] = value
        if variable.dtype == "flag":
            value = (
                np.vectorize(variable.flag_value, otypes=[np.int8])(value) if lengths else variable.flag_value(value)
            )
        if lengths:
            value = np.asarray(value)
            array[(*index, *(slice(0, n) for n in value.shape))] = value
        else:
            array[index] = value
    return dims, array, variable.attrs(unit)


def _same(a, b):
    a, b = np.asarray(a), np.asarray(b)
    if a.dtype.kind in "fiu" and b.dtype.kind in "fiu":
        return np.array_equal(a, b, equal_nan=True)
    return np.array_equal(a, b)


def _group(name, records, axes, places, unit):
    import xarray as xr

    members = [v for v in VARIABLES.values() if v.group == name]
    present = [v for v in members if any(record.get(v.name) is not None for record in records)]
    if not present:
        return None
    lengths = {}
    for variable in present:
        for record in records:
            value = record.get(variable.name)
            if value is None:
                continue
            shape = np.shape(value)
            if len(shape) != len(variable.dims):
                raise ValueError(f"{variable.name} has shape {shape}, but dimensions {variable.dims} ({_name(record)})")
            for dim, length in zip(variable.dims, shape):
                lengths[dim] = max(lengths.get(dim, 0), length)
    if "site" in lengths:
        # every group counts the same sites, so that the trees' groups can be combined by label
        lengths["site"] = axes["sites"][-1]
        if "other_site" in lengths:
            lengths["other_site"] = lengths["site"]
    variables = {v.name: _filled(v, records, axes, places, [lengths[d] for d in v.dims], unit) for v in present}
    coords = _coordinates({n: axes[n] for n in axes if any(n in dims for dims, _, _ in variables.values())})
    for dim, length in lengths.items():
        if dim == "component":
            coords[dim] = (dim, np.array(COMPONENTS[:length], dtype=object), _COORDINATES[dim])
        elif dim in _COORDINATES:
            coords[dim] = (dim, np.arange(length), _COORDINATES[dim])
    if name == "configuration" and "site" in lengths:
        dims = [*_dims(axes, "lattice"), "site"]
        mask = np.zeros([len(axes[n]) for n in dims[:-1]] + [lengths["site"]], dtype=np.int8)
        for place in places:
            mask[place["lattice"]] = np.arange(lengths["site"]) < axes["sites"][place["lattice"][-1]]
        attrs = {"long_name": "the cluster has this site", "flag_values": [0, 1], "flag_meanings": "no yes"}
        variables["present"] = (dims, mask, attrs)
    return xr.Dataset(variables, coords=coords)


def _encoding(tree):
    """On-disk types: counts as int32, flags as int8 without a fill value, arrays of some size compressed."""
    encoding = {}
    for node in tree.subtree:
        entries = {}
        for name, array in node.dataset.variables.items():
            kind = VARIABLES[name].dtype if name in VARIABLES else None
            entry = {}
            if kind == "count":
                entry = {"dtype": "int32", "_FillValue": -1}
            elif array.dtype.kind in "iu" or name in node.coords:
                entry = {"_FillValue": None} if array.dtype.kind != "O" else {}
            if array.dtype.kind != "O" and array.size > 1000:
                entry |= {"zlib": True, "complevel": 4, "shuffle": True}
            entries[name] = entry
        encoding[node.path] = entries
    return encoding


def _umask():
    mask = os.umask(0)
    os.umask(mask)
    return mask
