"""Which data each number rests on."""

from __future__ import annotations

from leakpipe.estimates import Estimate
from leakpipe.report.evidence import KINDS, OTHER, kinds_of
from leakpipe.report.figures.style import COLUMN, Drawing, NothingToDraw, canvas
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT

TITLE = "Which data each number rests on"

ROWS: tuple[tuple[str, str, str, str | None], ...] = (
    ("rise of detection", "rates", "detection_rise", None),
    ("settling time", "rates", "settling_rounds", None),
    ("kappa", "rates", "kappa", None),
    ("steady leakage, data", "rates", "steady_leakage", "data"),
    ("steady leakage, measure", "rates", "steady_leakage", "measure"),
    ("injection, data", "rates", "injection", "data"),
    ("injection, measure", "rates", "injection", "measure"),
    ("seepage, data", "rates", "seepage", "data"),
    ("seepage, measure", "rates", "seepage", "measure"),
    ("logical error per round", "logical", "logical_error_per_round", None),
    ("share of leakage", "share", "leakage_share", None),
)


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw a matrix of numbers against kinds of data, from the basis each estimate states.

    Raises
    ------
    NothingToDraw
        No stage has a result.
    """
    found = [
        (
            words,
            patch.estimate(stage, name) if role is None else patch.by_role(stage, name, role),
        )
        for words, stage, name, role in ROWS
    ]
    if not any(estimate.identifiable for _, estimate in found):
        raise NothingToDraw("no number is identifiable, so none rests on anything")
    table = [(words, estimate, kinds_of(estimate.basis)) for words, estimate in found]
    columns = [kind for kind in (*KINDS, OTHER) if any(kind in kinds for _, _, kinds in table)]
    figure = canvas(COLUMN, 1.75 + 0.23 * len(table), TITLE, place)
    axes = figure.subplots()
    for row, (_, estimate, kinds) in enumerate(table):
        for column, kind in enumerate(columns):
            if not estimate.identifiable:
                continue
            used = kind in kinds
            axes.plot(
                [column], [row], "s" if used else ".",
                color=LIGHT["data"] if used else LIGHT["quiet"],
                markersize=9 if used else 2,
            )  # fmt: skip
        if not estimate.identifiable:
            axes.text(-0.4, row, _why(estimate), va="center", size=8, color=LIGHT["quiet"])
    axes.set_yticks(range(len(table)), [words for words, _, _ in table])
    axes.set_xticks(range(len(columns)), columns, rotation=35, ha="left", rotation_mode="anchor")
    axes.xaxis.tick_top()
    axes.set_xlim(-0.6, max(len(columns), 4) - 0.4)
    axes.set_ylim(len(table) - 0.4, -0.6)
    axes.grid(visible=False)
    axes.tick_params(length=0)
    for spine in axes.spines.values():
        spine.set_visible(False)
    said = "; ".join(
        f"{words}: {', '.join(sorted(kinds)) if estimate.identifiable else 'not identifiable'}"
        for words, estimate, kinds in table
    )
    return Drawing(
        figure,
        TITLE,
        "A filled square: the number uses these data. What is not identifiable says so; the full "
        "reason stands in the list below the figures.",
        said,
    )


def _why(estimate: Estimate) -> str:
    return "only a limit" if estimate.high is not None else "not identifiable"
