"""One self-contained HTML page of a study: the answer, the cautions, tables, figures, workflow and provenance.

The page loads nothing: figures are inside it, its own content policy forbids anything else. Text of the user is
escaped.
"""

import base64
import contextlib
import io
import json
import os
import tempfile
from pathlib import Path

import numpy as np

from manybody.results import wording
from manybody.results.dataset import flag_words, open_results, points_table
from manybody.results.figure_view import look
from manybody.results.figures import figures_of, save
from manybody.results.normalization import title as normalization_title
from manybody.results.scaling_sites import determined
from manybody.results.schema import VARIABLES
from manybody.results.verdict import answer, cautions

MOST_ROWS = 100
RUNGS = (
    "upper_symbol_energy",
    "cluster_bound",
    "quantum_energy",
    "product_energy",
    "coherent_energy",
    "classical_energy",
    "harmonic_energy",
)


def write_report(results_path, out_path=None, normalization="energy", tolerance=0.05, select=None) -> Path:
    """Write the page for a results file (or its folder) and return its path, report.html beside the results by default.

    tolerance: |relative gap| that counts as good enough. normalization and select as for figures.draw, which lists the
    errors. The file is replaced at once.
    """
    results_path = Path(results_path)
    tree = open_results(results_path)
    if out_path is None:
        out_path = (results_path if results_path.is_dir() else results_path.parent) / "report.html"
    out_path = Path(out_path)
    page = render(tree, normalization, tolerance, select)
    handle, temporary = tempfile.mkstemp(dir=out_path.parent, prefix=f".{out_path.name}.", suffix=".part")
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write(page)
        os.chmod(temporary, 0o644)
        os.replace(temporary, out_path)
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(temporary)
        raise
    return out_path


def render(tree, normalization="energy", tolerance=0.05, select=None) -> str:
    """The page as text."""
    import jinja2

    view = look(tree, normalization, select)
    made, left_out = figures_of(tree, normalization, select)
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader(__package__, package_path="."),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    attrs = view.root.attrs
    return environment.get_template("report.html").render(
        title=attrs.get("title") or "Quantum and classical ground energies",
        answer=answer(view, tolerance),
        cautions=cautions(view, tolerance),
        normalization=normalization_title(normalization),
        unit=view.unit,
        tables=[t for t in (_gaps(view), _trust(view), _limits(view), _ladder(view)) if t],
        figures=[_embedded(*parts) for parts in made],
        left_out=left_out,
        workflow=attrs.get("workflow", ""),
        provenance=_provenance(attrs),
        style=jinja2.Environment(loader=environment.loader).get_template("report.css").render(),
    )


def _embedded(name, title, figure, caption):
    picture = io.BytesIO()
    save(figure, picture, "svg", title, caption)
    width, height = figure.get_size_inches()
    return {
        "name": name,
        "title": title,
        "caption": caption,
        "source": "data:image/svg+xml;base64," + base64.b64encode(picture.getvalue()).decode("ascii"),
        "width": round(96 * width),
        "height": round(96 * height),
    }


def _table(name, title, note, head, rows, total=None):
    total = len(rows) if total is None else total
    shown = rows[:MOST_ROWS]
    if total > len(shown):
        note = f"{note} The first {len(shown)} of {total} rows; all are in the results file.".strip()
    return {"name": name, "title": title, "note": note, "head": head, "rows": shown} if rows else None


def _gaps(view):
    energies = ["classical_energy", "quantum_energy", "quantum_energy_error", "gap", "relative_gap"]
    frame = points_table(view.tree, [*energies, "status", "ladder", "classical_certified"])
    keys = _keys(view)
    rows = []
    for row in frame.head(MOST_ROWS).to_dict("records"):
        factor = float(view.factor.sel(spin=row["spin"], rule=row["rule"]))
        error = row["quantum_energy_error"] * factor
        remarks = []
        if row["status"] != "converged":
            remarks.append(row["status"].replace("_", " "))
        if row["classical_certified"] != "yes":
            remarks.append("classical minimum not proved")
        if row["ladder"] == "violated":
            remarks.append("ladder violated")
        rows.append(
            [
                *_named(row, keys),
                wording.number(row["classical_energy"] * factor, 8),
                wording.number(row["quantum_energy"] * factor, 8),
                wording.number(error, 2),
                wording.number(row["gap"] * factor / row["sites"], 5),
                wording.percent(row["relative_gap"]) if np.isfinite(row["relative_gap"]) else "unknown",
                ", ".join(remarks),
            ]
        )
    head = [*(_title(k) for k in keys), "classical energy", "quantum energy", "95 % error", "gap per site"]
    note = f"Total energies{_in_unit(view)}; the gap is quantum minus classical."
    return _table("gaps", "Ground energies and gaps", note, [*head, "relative gap", "remarks"], rows, len(frame))


def _trust(view):
    if "trust_spin" not in view.scaling:
        return None
    names = ["trust_spin", "trust_spin_low", "trust_spin_high", "trust_state"]
    data = view.scaling[names]
    limit = None
    if "limit_trust_spin" in view.scaling:
        limit = view.scaling[["limit_" + name for name in names]]
        limit = limit.rename({"limit_" + name: name for name in names})
    within = data["within"].values.tolist()
    keys = [d for d in data["trust_spin"].dims if d != "within"]
    rows = []
    for part, size in ((data, None), (limit, "many")):
        if part is None:
            continue
        lead = [d for d in keys if d in part["trust_spin"].dims]
        words = flag_words(part["trust_state"].transpose(*lead, "within"))
        values = {n: part[n].transpose(*lead, "within").values for n in names[:3]}
        for place in np.ndindex(*[part.sizes[d] for d in lead]):
            row = {d: part[d].values.tolist()[i] for d, i in zip(lead, place)}
            if size:
                row["sites"] = size
            if not np.isfinite(values["trust_spin"][place]).any() and size:
                continue
            cells = [
                _verdict_cell([values[n][(*place, k)] for n in names[:3]], words[(*place, k)])
                for k in range(len(within))
            ]
            rows.append([*_named(row, keys), *cells])
    head = [*(_title(k) for k in keys), *(f"within {wording.percent(w)}" for w in within)]
    note = "From this spin on the classical energy stays within that part of the energy scale; range in brackets."
    return _table("trust", "Smallest trustworthy spin", note, head, rows)


def _verdict_cell(values, state):
    value, low, high = values
    if not np.isfinite(value):
        return "unknown"
    text = wording.spin(value)
    if low < value or high > value:
        text += f" ({wording.spin(low)} to {wording.spin(high)})"
    return f"{text}, {state.replace('_', ' ')}"


def _limits(view):
    if "limit_gap" not in view.scaling:
        return None
    data = view.scaling
    dims = list(data["limit_gap"].dims)
    rows = []
    for place in np.ndindex(*[data.sizes[d] for d in dims]):
        one = data[[n for n in data.data_vars if data[n].dims == tuple(dims)]].isel(dict(zip(dims, place)))
        if not np.isfinite(one["limit_gap"]):
            continue
        row = {d: data[d].values.tolist()[i] for d, i in zip(dims, place)}
        factor = float(view.factor.sel(spin=row["spin"], rule=row["rule"]))
        cells = [_limit_cell(one, key, factor) for key in ("energy", "classical", "gap")]
        cells.append(_limit_cell(one, "relative_gap", 1.0))
        sizes = f"{int(one['limit_sizes'])}, up to {int(one['limit_largest'])}"
        rows.append(
            [*_named(row, dims), *cells, str(one["limit_form"].item()), f"{sizes} ({one['limit_family'].item()})"]
        )
    head = [*(_title(d) for d in dims), "quantum", "classical", "gap", "relative gap", "leading form", "sizes"]
    note = f"Per site{_in_unit(view)}; standard errors on the last digits include the choice of the form."
    return _table("limits", "Limit of many sites", note, head, rows)


def _limit_cell(one, key, factor):
    value, error = float(one[f"limit_{key}"]) * factor, float(one[f"limit_{key}_error"]) * factor
    scale = 1.0 if key == "relative_gap" else float(one["limit_scale"]) * factor
    if not determined(value, error, scale):
        return f"undetermined (\N{PLUS-MINUS SIGN} {wording.number(error, 2)})"
    return wording.measured(value, error)


def _ladder(view):
    present = [n for n in RUNGS if np.isfinite(view.root[n]).any()]
    if len(present) < 4:
        return None
    frame = points_table(view.tree, [*present, "ladder"])
    keys = _keys(view)
    rows = []
    for row in frame.head(MOST_ROWS).to_dict("records"):
        factor = float(view.factor.sel(spin=row["spin"], rule=row["rule"]))
        cells = [wording.number(row[n] * factor / row["sites"], 6) for n in present]
        rows.append([*_named(row, keys), *cells, row["ladder"]])
    head = [*(_title(k) for k in keys), *(VARIABLES[n].long_name for n in present), "order"]
    return _table("ladder", "The energy ladder", f"Per site{_in_unit(view)}.", head, rows, len(frame))


def _keys(view):
    return list(view.root["status"].dims)


def _title(dim):
    return {"spin": "S", "sites": "sites"}.get(dim, dim)


def _named(row, keys):
    cells = []
    for key in keys:
        value = row[key]
        if key == "spin":
            cells.append(wording.spin(value))
        else:
            cells.append(wording.number(value, 6) if isinstance(value, float) else str(value))
    return cells


def _in_unit(view):
    return "" if view.unit in ("", "1") else f" in {view.unit}"


def _provenance(attrs):
    rows = []
    for key, value in attrs.items():
        if key in ("title", "workflow", "term_keys", "symmetry_axes") or value in ("", None):
            continue
        text = str(value)
        if text.startswith("{"):
            with contextlib.suppress(json.JSONDecodeError):
                text = ", ".join(f"{name} {version}" for name, version in json.loads(text).items())
        rows.append((key.replace("_", " "), text))
    return rows
