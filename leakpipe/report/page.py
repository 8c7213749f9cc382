"""`page.html`: one self-contained page per result, readable without a script."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from leakpipe.findings import Finding
from leakpipe.report import attention, tables
from leakpipe.report.figure_file import FigureFile
from leakpipe.report.inline import inline
from leakpipe.report.inputs import PatchReport
from leakpipe.report.readout_table import ReadoutTable, readout_table
from leakpipe.report.run_log import changed_words, placed, verdict
from leakpipe.report.web import CAUTION, rendered
from leakpipe.report.wording import listed, percent

SECTIONS = (
    ("verdict", "Verdict"),
    ("first", "What to look at first"),
    ("numbers", "Key numbers"),
    ("figures", "Figures"),
    ("qubits", "Qubits"),
    ("routes", "Routes of the share"),
    ("readout", "Readout"),
    ("findings", "Findings"),
    ("unknown", "Not identifiable"),
    ("provenance", "Provenance"),
    ("cautions", "Cautions"),
)

MEANINGS = {
    "act": "look at it before relying on the device",
    "watch": "a number rests on it",
    "note": "good to know",
}

OF_THE_MODEL = "readout-clouds"
"""The one figure that shows nothing but the readout model, which the bases of an epoch share."""

CAUTIONS = (
    CAUTION,
    "Leakage is taken as rare, independent episodes with geometric lifetimes on a device that is "
    "stationary within a recording; heating, drift and transport are tested for, and a finding "
    "says when such a test failed.",
    "The share of the logical error holds for this decoder and this range of R, and for the "
    "layout as it was given. It is not the gain that any particular removal step would bring.",
    "An interval holds its true value in 95 of 100 repeated epochs. With dozens of qubits on a "
    "page, some intervals miss by chance.",
)


@dataclass(frozen=True)
class _Item:
    """One entry of what to look at first."""

    words: str
    tag: str = ""


def page(
    summary: Mapping[str, Any],
    patches: Sequence[PatchReport],
    figures: Sequence[FigureFile],
    changes: Sequence[Finding] | None = None,
) -> str:
    """Return the HTML of a result's page.

    Parameters
    ----------
    summary
        What `leakpipe.report.summary.summary` returned for these patches.
    patches
        The same patches, for what the summary does not hold: configuration, hashes, layout.
    figures
        What `write_figures` returned, of all patches; the SVG files are read here.
    changes
        What moved since the last calibration; empty if nothing did, None without an earlier epoch.
    """
    word, said = verdict(summary)
    return rendered(
        "page.html",
        {
            "summary": summary,
            "word": word,
            "word_class": {"ACT": "act", "QUIET": "quiet-word", "BLIND": "blind"}.get(word, ""),
            "said": said,
            "sections": SECTIONS,
            "level": 95,
            "key_numbers": tables.key_numbers(summary),
            "first": _first(summary, patches),
            "nothing_first": _nothing_first(summary),
            "changed": changed_words(changes),
            "figure_groups": _figure_groups(figures, patches),
            "qubit_tables": tables.qubit_tables(summary, patches),
            "routes": tables.routes(summary),
            "readout_tables": _readout_tables(patches),
            "findings": [
                (
                    severity,
                    meaning,
                    [
                        {"words": placed(one["where"], one["sentence"]), "code": one["code"]}
                        for one in summary["findings"]
                        if one["severity"] == severity
                    ],
                )
                for severity, meaning in MEANINGS.items()
            ],
            "unknowns": attention.unknowns(summary),
            "provenance": _provenance(summary, patches),
            "config_text": patches[0].config_text if patches else "",
            "cautions": CAUTIONS,
        },
    )


def _first(summary: Mapping[str, Any], patches: Sequence[PatchReport]) -> list[_Item]:
    """Return findings to act on, then the qubits that stand out with the couplers to look at."""
    act = [finding for finding in summary["findings"] if finding["severity"] == "act"]
    odd = attention.joined(summary)
    items = []
    for finding in act:
        about = [one for one, _ in odd if finding["where"].split(": ")[-1] == one.qubit]
        said = placed(finding["where"], finding["sentence"])
        couplers = _couplers(about[0], patches, said) if about else ""
        items.append(_Item(f"{said}{couplers}", "act"))
    told = {finding["where"].split(": ")[-1] for finding in act}
    for one, bases in odd:
        if one.qubit in told:
            continue
        seen = f" Seen in {' and '.join(bases)}." if len(summary["patches"]) > 1 else ""
        items.append(
            _Item(
                f"{one.qubit} ({one.role} qubit of {one.patch}): steady leakage "
                f"{percent(one.leakage)}, {one.ratio:.1f} times the median of its kind."
                f"{seen}{_couplers(one, patches)}"
            )
        )
    return items


def _couplers(one: attention.Outlier, patches: Sequence[PatchReport], said: str = "") -> str:
    """Return the qubits that share a coupler with this one, unless they were named already."""
    for patch in patches:
        if patch.patch == one.patch and patch.basis == one.basis:
            others = patch.layout.neighbours(one.qubit)
            if all(name in said for name in others):
                return ""
            return f" Its couplers: to {listed(others)}."
    return ""


def _nothing_first(summary: Mapping[str, Any]) -> str:
    known = any(
        qubit["steady_leakage"]["value"] is not None
        for patch in summary["patches"]
        for qubit in patch["qubits"]
    )
    if known:
        return "No finding asks to act, and no qubit stands out from its kind."
    return "No finding asks to act. No qubit can be named: leakage per qubit is not identifiable."


def _figure_groups(
    figures: Sequence[FigureFile], patches: Sequence[PatchReport]
) -> list[tuple[str, list[dict[str, Any]]]]:
    """Return the figures per patch and basis, without repeating what two bases share."""
    groups: dict[str, list[dict[str, Any]]] = {}
    repeated = _places_with_known_model(patches)
    for number, figure in enumerate(figures):
        if figure.name == OF_THE_MODEL and figure.place in repeated:
            continue
        svg: Markup | None = None
        if figure.svg is not None:
            svg = inline(figure.svg, figure.alt, f"f{number}")
        groups.setdefault(figure.place, []).append(
            {
                "title": figure.title,
                "caption": figure.caption,
                "missing": figure.missing,
                "wide": figure.wide,
                "svg": svg,
            }
        )
    return list(groups.items())


def _readout_tables(patches: Sequence[PatchReport]) -> list[ReadoutTable]:
    """Return the readout diagnostics, once for each readout model."""
    known = _places_with_known_model(patches)
    made = [readout_table(patch) for patch in patches if patch.label not in known]
    return [table for table in made if table is not None]


def _places_with_known_model(patches: Sequence[PatchReport]) -> set[str]:
    """Return the patches and bases whose readout model an earlier one has shown already."""
    shown: list[Any] = []
    places = set()
    for patch in patches:
        model = patch.stage("model")
        if model is None:
            continue
        if any(model.identical(other) for other in shown):
            places.add(patch.label)
        else:
            shown.append(model)
    return places


def _provenance(
    summary: Mapping[str, Any], patches: Sequence[PatchReport]
) -> list[tuple[str, str]]:
    rows = [
        ("device", summary["device"]),
        ("calibration", summary["calibration_id"]),
        ("recorded at", summary["acquired_at"]),
        ("made at", summary["made_at"]),
    ]
    seeds = {str(patch.seed) for patch in patches if patch.seed is not None}
    if seeds:
        rows.append(("seed", ", ".join(sorted(seeds))))
    versions: dict[str, str] = {}
    hashes: dict[str, str] = {}
    for patch in patches:
        versions |= patch.versions
        hashes |= patch.input_hashes
    rows += [(f"version of {name}", version) for name, version in sorted(versions.items())]
    rows += [(f"input {name}", digest) for name, digest in sorted(hashes.items())]
    return rows
