import itertools
import os
import re
import shutil
import subprocess
from html.parser import HTMLParser

import numpy as np
import pytest
from solvable import ATTRS, ring_records

from manybody.results import report
from manybody.results.dataset import open_results, write_results
from manybody.results.figure_view import look
from manybody.results.normalization import NormalizationError
from manybody.results.report import render, write_report
from manybody.results.verdict import JUDGE, answer, cautions

BROWSER = shutil.which("chromium") or shutil.which("chromium-browser")


class Page(HTMLParser):
    """Elements in order, with attributes and text."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.text = [], []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_data(self, data):
        self.text.append(data)

    def of(self, tag):
        return [attrs for name, attrs in self.elements if name == tag]


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    path = tmp_path_factory.mktemp("report")
    attrs = ATTRS | {"title": "Rings <of> buoys & bells"}
    write_results(path / "results.nc", ring_records((4, 6, 8), (0.5, 1.0, 1.5)), attrs)
    return path


@pytest.fixture(scope="module")
def page(folder):
    return write_report(folder).read_text(encoding="utf-8")


def sentences(records, **attrs):
    from manybody.results.dataset import records_to_tree
    from manybody.results.scaling import scaling_dataset

    tree = records_to_tree(records, ATTRS | attrs)
    tree["scaling"] = type(tree)(scaling_dataset(tree))
    return answer(look(tree)), cautions(look(tree))


def test_page_is_beside_the_results_and_leads_with_the_answer(folder, page):
    assert (folder / "report.html").read_text(encoding="utf-8") == page
    first, second = answer(look(open_results(folder)))
    text = " ".join("".join(Page(page).text).split())
    order = [
        text.index(" ".join(part.split())) for part in (first, second, "Before you rely on it", "Figures", "Tables")
    ]
    assert order == sorted(order)
    assert first.endswith(".") and second.endswith(".")
    # ring of 8, S = 1/2: (-3.651093 * 4 + 8)/8 per site (row A006 of the reference values)
    assert "lies below the classical one by 0.8255 meV at S = 1/2" in first and "8 sites, rule wick" in first
    assert "under wick" in second and "under toeplitz" in second and "extrapolated" in second


def test_page_loads_nothing_from_outside(page):
    elements = Page(page)
    for tag, attrs in elements.elements:
        for name in ("src", "href", "srcset", "data", "action", "poster"):
            value = attrs.get(name)
            assert value is None or value.startswith(("data:image/svg+xml;base64,", "#")), (tag, name)
    assert not elements.of("script") and not elements.of("link") and not elements.of("iframe")
    style = page[page.index("<style>") : page.index("</style>")]
    assert "url(" not in style and "@import" not in style
    policy = [a["content"] for a in elements.of("meta") if a.get("http-equiv") == "Content-Security-Policy"]
    assert policy and policy[0].startswith("default-src 'none'")


def test_page_is_accessible(page):
    elements = Page(page)
    assert elements.of("html")[0]["lang"] == "en" and len(elements.of("h1")) == 1 and elements.of("main")
    levels = [int(tag[1]) for tag, _ in elements.elements if re.fullmatch("h[1-6]", tag)]
    assert levels[0] == 1 and all(b - a <= 1 for a, b in itertools.pairwise(levels))
    assert elements.of("img") and all(len(a["alt"]) > 40 and a["width"] and a["height"] for a in elements.of("img"))
    assert len(elements.of("caption")) == len(elements.of("table"))
    assert all(a.get("scope") in ("col", "row") for a in elements.of("th"))
    ids = [a["id"] for _, a in elements.elements if "id" in a]
    assert len(ids) == len(set(ids))
    assert {a["aria-labelledby"] for _, a in elements.elements if "aria-labelledby" in a} <= set(ids)


def test_text_colours_have_contrast(page):
    from matplotlib.colors import to_rgb

    def luminance(colour):
        linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in to_rgb(colour)]
        return float(np.dot(linear, [0.2126, 0.7152, 0.0722]))

    colours = dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", page))
    for text in ("ink", "soft"):
        for ground in ("#ffffff", colours["wash"]):
            # 4.5 is level AA of WCAG 2 for small text
            assert (luminance(ground) + 0.05) / (luminance(colours[text]) + 0.05) > 4.5


def test_users_text_is_escaped_and_the_whole_workflow_is_there(page):
    assert "Rings &lt;of&gt; buoys &amp; bells" in page and "<of>" not in page
    text = "".join(Page(page).text)
    assert ATTRS["workflow"] in text and "manybody 0.1.0" in text


def test_cautions_name_what_is_wrong():
    records = ring_records((4, 6, 8), (0.5, 1.0), rules=("wick",))
    records[0].update(status="failed", message="worker lost")
    records[1].update(status="not_converged", message="raise max_bond", quantum_energy_error=0.2)
    records[2].update(coherent_energy=-20.0)
    for record in records[:2]:
        record.update(classical_certified=False, classical_energy_bound=-4.2)
        record.update(classical_message="the classical minimum is not converged")
    _, found = sentences(records)
    text = " ".join(found)
    assert "1 of 6 points failed" in text and "worker lost" in text
    assert "did not converge" in text and "raise max_bond" in text
    assert "ladder is violated at 1 point" in text and "sites 6" in text
    assert "1 of 3 classical minima are not proved global" in text and "5" in text
    assert "1 of 3 classical minima need a remark. The program said: the classical minimum is not conv" in text
    assert "rigorous bound" in text
    assert "beyond the largest spin computed" in text and found[-1] == JUDGE
    for record in records[:2]:
        record.update(classical_bound_method="clusters_searched")
    assert "rigorous bound" not in " ".join(sentences(records)[1])


def test_no_false_caution_on_a_clean_study():
    _, found = sentences(ring_records((4, 6), (0.5, 1.0, 1.5, 2.0), rules=("wick",)))
    text = " ".join(found)
    for word in ("failed", "converge", "violated", "proved", "agree"):
        assert word not in text, text


@pytest.mark.parametrize(
    ("records", "first", "second"),
    [
        (ring_records((4,), (0.5, 1.0), ("wick",), energies={}), "is unknown", "is unknown"),
        (ring_records((4,), (0.5,), ("wick",)), "100", "two spins at least"),
        (
            # a ferromagnet: gap and e_1 are zero
            [
                r | {"quantum_energy": r["classical_energy"], "harmonic_coefficient": 0.0}
                for r in ring_records((4,), (0.5, 1.0), ("wick",))
            ],
            "equals the classical one within rounding",
            "S = 1/2 under wick",
        ),
        (
            [
                r | {"parameters": {"d": d}, "quantum_energy": r["quantum_energy"] * (1 + d)}
                for d in (0.0, 0.1)
                for r in ring_records((4,), (0.5, 1.0, 1.5), ("wick",))
            ],
            "over all d",
            "S = 10 to",
        ),
    ],
    ids=["nothing computed", "one spin", "zero gap", "sweep"],
)
def test_answer_of_special_studies(records, first, second):
    (one, two), _ = sentences(records)
    assert first in one and second in two, (one, two)


def unusual():
    rings = ring_records((4, 6), (0.5, 1.0))
    undefined = {"sites": 4, "spin": 0.5, "rule": "wick", "status": "undefined", "message": "rank 2 above 2S"}
    energies = {(4, 0.5): -2.0, (4, 1.0): -6.0}
    return {
        "two lattices": [r | {"lattice": "short" if r["sites"] == 4 else "long"} for r in rings],
        "classical only": [{"sites": 5, "parameters": {"d": 0.1}, "classical_energy": -1.0}],
        "undefined": [undefined, *ring_records((4,), (1.0, 1.5), ("wick",))],
        "many rows": [
            r | {"parameters": {"p": float(p)}}
            for p in range(40)
            for r in ring_records((4,), (0.5, 1.0), energies=energies)
        ],
    }


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("two lattices", "over all lattices"),
        ("classical only", "no point has a quantum energy yet"),
        ("undefined", "rank 2 above 2S"),
        ("many rows", "The first 100 of 160 rows"),
    ],
)
def test_unusual_studies_in_memory(name, words):
    from manybody.results.dataset import records_to_tree
    from manybody.results.scaling import scaling_dataset

    tree = records_to_tree(unusual()[name], ATTRS)
    tree["scaling"] = type(tree)(scaling_dataset(tree))
    assert words in " ".join(render(tree).split())


def test_spin_normalization_and_its_refusal(folder):
    tree = open_results(folder)
    page = render(tree, normalization="spin")
    # ring of 8, S = 1/2: gap -6.604/4 in total, -0.2064 per site
    assert "H = Σ J S·S" in page and "0.2064 meV at S = 1/2" in page
    tree.attrs["term_keys"] = "[[[1, 1], [1, 1]], [[1, 1]]]"
    with pytest.raises(NormalizationError, match="degree"):
        render(tree, normalization="spin")


def test_a_failed_write_keeps_the_old_page(folder, tmp_path, monkeypatch):
    shutil.copy(folder / "results.nc", tmp_path / "results.nc")
    monkeypatch.setattr(report, "render", lambda *_: "new")
    (tmp_path / "report.html").write_text("old")

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(OSError, match="No space"):
        write_report(tmp_path)
    assert (tmp_path / "report.html").read_text() == "old" and len(list(tmp_path.iterdir())) == 2


@pytest.mark.skipif(BROWSER is None, reason="no chromium on this machine (apt-get install chromium)")
def test_a_real_browser_shows_and_prints_the_page(folder, page, tmp_path):
    options = [
        *("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run"),
        *("--disable-background-networking", "--disable-component-update", "--disable-sync"),
        *(f"--user-data-dir={tmp_path / 'profile'}", "--enable-logging=stderr", "--log-level=0"),
    ]
    address = (folder / "report.html").as_uri()

    def browse(*more):
        return subprocess.run(
            [BROWSER, *options, *more, address], capture_output=True, text=True, timeout=120, check=True
        )

    shown = browse("--dump-dom")
    assert "Before you rely on it" in shown.stdout
    problems = [line for line in shown.stderr.splitlines() if "CONSOLE" in line]
    assert not problems, problems
    browse(f"--screenshot={tmp_path / 'page.png'}", "--window-size=1000,1400")
    from matplotlib.image import imread

    picture = imread(tmp_path / "page.png")
    assert picture.shape[:2] == (1400, 1000)
    # ink on paper: the answer and the first figure are in sight
    assert 0.01 < np.mean(picture[..., :3].mean(axis=2) < 0.6) < 0.5
    browse(f"--print-to-pdf={tmp_path / 'page.pdf'}", "--no-pdf-header-footer")
    pdf = (tmp_path / "page.pdf").read_bytes()
    assert pdf.startswith(b"%PDF") and pdf.count(b"/Type /Page\n") + pdf.count(b"/Type /Page ") >= 2
