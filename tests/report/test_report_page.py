"""Both pages, read as HTML: self-contained, escaped, well ordered, usable without a script."""

import base64
import hashlib
import re
from dataclasses import replace
from functools import cache
from html.parser import HTMLParser
from itertools import pairwise

import pytest
from report_examples import layouts, patch_report, renamed, season

from leakpipe.codes.rotated import rotated_surface
from leakpipe.findings import Finding
from leakpipe.report.epochs import epochs_page
from leakpipe.report.figure_file import FigureFile
from leakpipe.report.figures import write_figures
from leakpipe.report.page import page
from leakpipe.report.summary import summary

VOID = {"meta", "link", "br", "hr", "img", "input"}
LOADING = {"src", "srcset", "href", "action", "data", "poster", "background", "formaction"}
NASTY = "<script>alert('x')</script>"


class Reader(HTMLParser):
    """Collects elements with their attributes and text, and checks that tags close in order."""

    def __init__(self):
        super().__init__(convert_charrefs=True)
        self.elements = []
        self.open = []
        self.words = {}

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(len(self.elements) - 1)

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.elements[self.open.pop()][0] == tag, f"</{tag}> closes something else"

    def handle_data(self, data):
        for place in self.open:
            self.words[place] = self.words.get(place, "") + data

    def all(self, tag):
        return [attrs for name, attrs in self.elements if name == tag]

    def text_of(self, tag):
        return [
            " ".join(self.words.get(place, "").split())
            for place, (name, _) in enumerate(self.elements)
            if name == tag
        ]


@cache
def read(html):
    """Parse a page once, however many tests look at it."""
    reader = Reader()
    reader.feed(html)
    reader.close()
    assert not reader.open
    return reader


@pytest.fixture(scope="module")
def pages(tmp_path_factory, patch, drawn):
    """Every kind of page: full, two bases, bare, nasty names, history, empty history."""
    folder = tmp_path_factory.mktemp("figures")

    def of(*patches, figures, changes=None):
        return page(summary(list(patches), changes or ()), patches, figures, changes)

    full = patch
    nasty = replace(
        patch_report(layout=renamed(rotated_surface(3), "D3", NASTY)),
        device=NASTY, patch=NASTY, calibration_id=NASTY, config_text=NASTY,
        input_hashes={NASTY: NASTY}, findings=(Finding(NASTY, "act", NASTY, NASTY),),
    )  # fmt: skip
    bare = patch_report(stages=())
    other = replace(patch_report(seed=11), basis="X")
    again = [replace(figure, place=other.label) for figure in drawn]
    large = patch_report(layout=layouts()["surface 5"])
    change = Finding("change", "watch", "D3", "D3 rose.")
    rows = season()
    for row in rows:
        row["epoch"] = row["epoch"].replace("cal", NASTY)
    nasty_rows = [{**row, "patch": NASTY, "qubit": row["qubit"] and NASTY} for row in rows]
    flag = {"severity": "act", "where": NASTY, "sentence": NASTY, "epoch": NASTY}
    return {
        "full": of(full, figures=drawn, changes=[change]),
        "two bases": of(full, other, figures=[*drawn, *again]),
        "surface 5": of(large, figures=drawn),
        "bare": of(bare, figures=write_figures(bare, folder)),
        "nasty": of(nasty, figures=write_figures(nasty, folder / "nasty")),
        "no figures": of(full, figures=[]),
        "history": epochs_page(
            season(), [Finding("jump", "act", "D3", "D3 rose.", {"epoch": "x"})]
        ),
        "nasty history": epochs_page(nasty_rows, [flag]),
        "no history": epochs_page([], []),
    }


ALL = [
    "full", "two bases", "surface 5", "bare", "nasty", "no figures", "history", "nasty history",
    "no history",
]  # fmt: skip


@pytest.mark.parametrize("name", ALL)
def test_tags_close_in_order(pages, name):
    """The page is well formed: every element is closed, in order."""
    read(pages[name])


@pytest.mark.parametrize("name", ALL)
def test_nothing_comes_from_outside(pages, name):
    """Every reference points into the page or carries its data itself."""
    for tag, attrs in read(pages[name]).elements:
        for attribute in LOADING & {key.split(":")[-1] for key in attrs}:
            target = attrs.get(attribute) or attrs.get(f"xlink:{attribute}") or ""
            assert target.startswith(("#", "data:image/png;base64,")), (tag, target)
    assert not re.search(r"(https?:)?//[a-z0-9]", pages[name].replace(NASTY, ""), re.IGNORECASE)
    assert "@import" not in pages[name]
    assert not re.search(r"url\((?!#|&quot;#|\"#)", pages[name])


@pytest.mark.parametrize("name", ALL)
def test_policy_allows_our_script_only(pages, name):
    """The policy forbids everything but inline styles, inline images and the one script's hash."""
    reader = read(pages[name])
    policy = next(
        m["content"] for m in reader.all("meta")
        if m.get("http-equiv") == "Content-Security-Policy"
    )  # fmt: skip
    script = re.search(r"<script>(.*)</script>", pages[name], re.DOTALL).group(1)
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    assert policy.startswith("default-src 'none'")
    assert f"script-src 'sha256-{digest}'" in policy
    assert len(reader.all("script")) == 1


@pytest.mark.parametrize("name", ["nasty", "nasty history"])
def test_text_from_recordings_is_escaped(pages, name):
    """A script in a name of a qubit, device, file or epoch stays text everywhere."""
    assert NASTY not in pages[name]
    assert "&lt;script&gt;" in pages[name]
    assert NASTY in " ".join(read(pages[name]).text_of("body"))


def test_nasty_names_stay_readable(pages):
    """Escaping happens once: the qubit's name reads as it is in the table."""
    assert NASTY in read(pages["nasty"]).text_of("th")


@pytest.mark.parametrize("name", ALL)
def test_headings_in_order(pages, name):
    """One first-level heading; no level is skipped on the way down."""
    levels = [int(t[1]) for t, _ in read(pages[name]).elements if re.fullmatch("h[1-6]", t)]
    assert levels.count(1) == 1
    assert levels[0] == 1
    assert all(later - earlier <= 1 for earlier, later in pairwise(levels))


@pytest.mark.parametrize("name", ALL)
def test_landmarks_and_labels(pages, name):
    """Header, main, footer, a labelled navigation; sections named by headings that exist."""
    reader = read(pages[name])
    for tag in ("header", "main", "footer", "nav"):
        assert len(reader.all(tag)) == 1
    ids = [attrs["id"] for _, attrs in reader.elements if "id" in attrs]
    assert len(ids) == len(set(ids))
    for section in reader.all("section"):
        assert section["aria-labelledby"] in ids
    for link in reader.all("a"):
        assert link["href"][1:] in ids
    assert reader.all("html")[0]["lang"] == "en"


@pytest.mark.parametrize("name", ALL)
def test_pictures_have_words(pages, name):
    """Every drawing has a text alternative or is marked as decoration; tables have captions."""
    reader = read(pages[name])
    for svg in reader.all("svg"):
        assert svg.get("aria-hidden") == "true" or (svg["role"] == "img" and svg["aria-label"])
    assert len(reader.all("table")) == len(reader.all("caption"))
    for head in reader.all("th"):
        assert head["scope"] in ("col", "row")


def test_references_inside_drawings_resolve(pages):
    """Clip paths and markers of a drawing point to ids of the page after the ids were prefixed."""
    for html in pages.values():
        ids = {attrs["id"] for _, attrs in read(html).elements if "id" in attrs}
        used = set(re.findall(r"url\(#([^)]+)\)", html)) | set(re.findall(r'href="#([^"]+)"', html))
        assert used <= ids


def test_page_says_what_matters(pages):
    """Verdict, worst qubit with its couplers, change, unknowns with reasons, cautions."""
    words = " ".join(read(pages["full"]).text_of("main"))
    for said in (
        "Look at D3 first",
        "Its couplers: to M0, M2, M3",
        "D3 rose.",
        "1.03 % (0.91 to 1.15)",
        "no leaked readings and a covariance below three sigma",
        "responsible operator's judgement",
        "sha256:0f3a",
        "boundary_rounds",
    ):
        assert said in words, said


def test_all_qubits_are_in_the_table(pages):
    """Each of the 49 qubits has a row, in the order of the layout."""
    layout = layouts()["surface 5"]
    heads = read(pages["surface 5"]).text_of("th")
    names = [*layout.data, *layout.measure]
    # Once with leakage and rates, once with the diagnostics of the readout.
    assert [head for head in heads if head in names] == [*names, *names]


def test_missing_figures_are_said(pages):
    """What could not be drawn is named with its reason."""
    words = " ".join(read(pages["bare"]).text_of("main"))
    assert words.count("Not drawn:") == 9


def test_figures_follow_the_dark(pages):
    """Colours of the figures are the page's variables, which have values for light and dark."""
    assert "fill: var(--data, #" in pages["full"]
    assert "prefers-color-scheme: dark" in pages["full"]
    assert "@media print" in pages["full"]


def test_bases_share_the_model_figure(pages):
    """The clouds stand once where two bases share the model, twice where their models differ."""
    clouds = "Readout clouds and decision regions"
    assert read(pages["two bases"]).text_of("h4").count(clouds) == 2
    one = patch_report(stages=("model",))
    other = replace(one, basis="X")
    figures = [FigureFile("readout-clouds", p.label, clouds, missing="-") for p in (one, other)]
    html = page(summary([one, other]), [one, other], figures)
    assert read(html).text_of("h4").count(clouds) == 1


def test_history_has_every_series(pages):
    """Each quantity has a trend; the flagged qubit is marked with its epoch; gaps stay gaps."""
    reader = read(pages["history"])
    words = " ".join(reader.text_of("main"))
    assert "Leakage share" in words
    assert "cal-0008" in " ".join(reader.text_of("td"))
    # 12 epochs, one without a value, and one of the qubit's flagged: a diamond instead of a dot.
    dots = [path["d"].count("M") for path in reader.all("path") if path.get("class") == "dots"]
    assert dots == [11, 10]


def test_flags_mark_their_epoch():
    """A finding marks the epoch, qubit and quantity that it names, and nothing else."""
    rows = [{**row, "flags": []} for row in season()]
    numbers = {"epoch": "cal-0005", "quantity": "steady_leakage"}
    flag = Finding("leakage-changed", "act", "D3", "D3 rose.", numbers)
    dots = [
        path["d"].count("M")
        for path in read(epochs_page(rows, [flag])).all("path")
        if path.get("class") == "dots"
    ]
    assert dots == [11, 10]


def test_rows_of_the_history_as_they_are():
    """Rows with calibration, basis and device are grouped by patch and basis."""
    rows = []
    for row in season():
        bare = {key: value for key, value in row.items() if key not in ("epoch", "flags")}
        for basis in "ZX":
            rows.append({**bare, "calibration_id": row["epoch"], "basis": basis, "device": "one"})
    reader = read(epochs_page(rows, []))
    assert {"west Z", "west X"} <= set(reader.text_of("h2"))


def test_history_in_order_of_recording():
    """Epochs are ordered by the time of recording, whatever order the rows come in."""
    assert epochs_page(season(), []) == epochs_page(season()[::-1], [])
