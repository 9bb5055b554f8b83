import io

import numpy as np
import pytest
from solvable import ATTRS, ring_records

from manybody.results import figures, figures_gap
from manybody.results.dataset import records_to_tree, write_results
from manybody.results.figures import FIGURES, draw, figures_of, save
from manybody.results.normalization import NormalizationError
from manybody.results.scaling import scaling_dataset


def swept_records(second=False):
    """Made-up energies over one or two parameters, with a trace of bond dimensions and unproved minima."""
    records = []
    for sites in (4, 6):
        for d in (0.0, 0.2, 0.4):
            for h in (0.0, 1.0) if second else (None,):
                for spin in (0.5, 1.0, 1.5):
                    for rule in ("substitution", "toeplitz"):
                        minimum = -sites * (1 + d * d)
                        first = -(0.36 + 0.3 * d + 0.1 * (h or 0)) * sites * (1 if rule == "substitution" else -3)
                        energy = minimum + first / spin * (1 - 0.1 / spin)
                        stages = np.array([8.0, 16, 32, 64])
                        records.append(
                            {
                                "sites": sites,
                                "spin": spin,
                                "rule": rule,
                                "parameters": {"d": d} | ({"h": h} if second else {}),
                                "status": "converged" if spin < 1.5 else "not_converged",
                                "message": "" if spin < 1.5 else "raise max_bond",
                                "classical_energy": minimum,
                                "classical_energy_bound": 1.01 * minimum,
                                "classical_certified": False,
                                "classical_mean": 0.0,
                                "quantum_energy": energy,
                                "quantum_energy_error": 0.01,
                                "quantum_method": "matrix_product",
                                "harmonic_coefficient": first,
                                "trace_bond_dimension": stages,
                                "trace_energy": energy + np.exp(-stages / 12),
                            }
                        )
    return records


def tree_of(records, attrs=ATTRS):
    tree = records_to_tree(records, attrs)
    tree["scaling"] = type(tree)(scaling_dataset(tree))
    return tree


@pytest.fixture(scope="module")
def rings():
    return tree_of(ring_records((4, 6, 8), (0.5, 1.0, 1.5)))


@pytest.fixture(scope="module")
def swept():
    return tree_of(swept_records(second=True))


def names(made):
    return {name for name, *_ in made}


def test_every_figure_is_drawn_from_some_study(rings, swept):
    made = figures_of(rings)[0] + figures_of(swept)[0] + figures_of(tree_of(swept_records()))[0]
    assert names(made) == set(FIGURES)


def test_what_is_left_out_comes_with_its_reason(rings, swept):
    made, left_out = figures_of(rings)
    assert names(made) | set(left_out) == set(FIGURES) and not names(made) & set(left_out)
    assert left_out["gap-parameters"] == "the study sweeps no parameter"
    assert "matrix-product" in left_out["convergence"]
    assert "configuration" in figures_of(swept)[1]


def test_axes_name_quantity_and_unit_and_curves_have_a_legend(rings, swept):
    for name, _, figure, caption in figures_of(rings)[0] + figures_of(swept)[0]:
        labelled = [axis for axis in figure.axes if axis.get_xlabel() or axis.get_ylabel()]
        assert labelled, name
        text = " ".join(axis.get_ylabel() + axis.get_xlabel() for axis in figure.axes)
        if name in ("ladder", "gap-spin", "gap-sites", "convergence"):
            assert "(meV)" in text, name
            assert figure.legends or figure.axes[0].get_legend(), name
        assert len(caption) > 40


def test_error_bars_are_drawn(rings):
    from matplotlib.container import ErrorbarContainer

    for name, _, figure, _ in figures_of(rings, only=["ladder", "gap-spin", "gap-sites"])[0]:
        assert any(isinstance(c, ErrorbarContainer) for axis in figure.axes for c in axis.containers), name


def test_published_limit_is_laid_over_a_matching_study_only(rings):
    captions = {name: caption for name, *_, caption in figures_of(rings)[0]}
    assert "Bethe 1931" in captions["gap-sites"]
    other = tree_of(ring_records((4, 6, 8), (0.5,)), ATTRS | {"workflow": ""})
    assert "Bethe" not in {name: caption for name, *_, caption in figures_of(other)[0]}["gap-sites"]


def test_spin_normalization_scales_the_energies(rings):
    plain, spin = (figures_of(rings, normalization=n, only="ladder")[0][0][2] for n in ("energy", "spin"))

    def classical(figure):
        return figure.axes[0].lines[0].get_ydata()

    np.testing.assert_allclose(classical(spin), classical(plain) * np.array([0.25, 1, 2.25]))
    mixed = tree_of(swept_records(), ATTRS | {"term_keys": [[[1, 1], [1, 1]], [[1, 1]]]})
    with pytest.raises(NormalizationError, match="degree 1 and 2"):
        figures_of(mixed, normalization="spin")


def test_parameters_can_be_selected(swept):
    made = figures_of(swept, select={"d": 0.4, "h": 1.0}, only="ladder")[0]
    assert "d = 0.4, h = 1" in made[0][3]
    for wrong, reason in (({"d": 7.0}, "not in the study"), ({"x": 1.0}, "no lattice or parameter")):
        with pytest.raises(ValueError, match=reason):
            figures_of(swept, select=wrong)


@pytest.mark.parametrize(
    "records",
    [
        ring_records((4,), (0.5,), rules=("wick",)),
        ring_records((4, 6), (0.5,), rules=("wick",)),
        ring_records((4,), (0.5, 1.0), rules=("wick",), energies={}),
        ring_records((3, 4), (0.5, 1.0, 1.5), energies={(3, 1.0): -3.0, (4, 0.5): -2.0, (4, 1.0): -6.0}),
        [{"sites": 3, "spin": 0.5, "rule": "wick", "status": "failed", "message": "no"}],
        [r | {"quantum_energy": r["classical_energy"]} for r in ring_records((4, 6), (0.5, 1.0), rules=("wick",))],
    ],
    ids=["one point", "one spin", "nothing computed", "gaps in the study", "failed", "zero gaps"],
)
def test_incomplete_studies_draw_what_they_can(records):
    made, left_out = figures_of(tree_of(records))
    assert names(made) | set(left_out) == set(FIGURES)
    for _, title, figure, caption in made:
        picture = io.BytesIO()
        save(figure, picture, "svg", title, caption)
        assert picture.tell() > 2000


def test_files_are_the_formats_asked_for_and_reproducible(tmp_path):
    write_results(tmp_path / "results.nc", ring_records((4, 6), (0.5, 1.0)), ATTRS)
    first = draw(tmp_path, tmp_path / "a", only="ladder")
    second = draw(tmp_path / "results.nc", tmp_path / "b", only="ladder")
    assert [p.name for p in first.drawn[0].paths] == ["ladder.png", "ladder.svg"]
    assert first.drawn[0].paths[0].read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"
    svg = first.drawn[0].paths[1].read_text()
    assert "<svg" in svg and "Energy ladder" in svg
    assert svg == second.drawn[0].paths[1].read_text()
    for wrong in ({"formats": ("bmp",)}, {"formats": ()}, {"only": "nothing"}):
        with pytest.raises(ValueError, match="choose among"):
            draw(tmp_path, tmp_path / "c", **wrong)
    assert not (tmp_path / "c").exists()


def test_drawing_leaves_matplotlib_as_it_was(rings):
    import matplotlib

    before = dict(matplotlib.rcParams)
    figures_of(rings, only="ladder")
    assert dict(matplotlib.rcParams) == before


def contrast(colour, paper=(1, 1, 1)):
    """WCAG 2 contrast ratio."""
    from matplotlib.colors import to_rgb

    def luminance(rgb):
        linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in rgb]
        return np.dot(linear, [0.2126, 0.7152, 0.0722])

    a, b = sorted([luminance(to_rgb(colour)), luminance(paper)])
    return (b + 0.05) / (a + 0.05)


def test_colours_can_be_told_from_paper_and_from_each_other():
    from manybody.results.figure_style import COLOURS, DASHES, INK, MARKERS

    assert contrast(INK) > 7 and all(contrast(c) > 2.4 for c in COLOURS)
    assert len(set(MARKERS)) >= len(COLOURS) and len(set(DASHES)) >= len(COLOURS)
    assert figures.FORMATS[:2] == ("png", "svg")


def test_limits_that_the_sizes_do_not_determine_are_not_drawn(monkeypatch):
    tree = tree_of(ring_records((4, 6, 8), (0.5, 1.0), rules=("wick",)))
    # S = 1/2: -0.77, S = 1: -0.40
    monkeypatch.setattr(figures_gap, "determined", lambda value, error, scale: value > -0.5)
    made, _ = figures_of(tree)
    caption = next(caption for name, _, _, caption in made if name == "gap-sites")
    assert "do not determine the limit of many sites for S = 1/2 (wick)." in caption
