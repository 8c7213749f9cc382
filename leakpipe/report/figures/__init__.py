"""The figures of a report: each module draws one, `write_figures` writes them all."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

from leakpipe.report.figure_file import FigureFile
from leakpipe.report.figures import (
    chip,
    clouds,
    correlation,
    detection,
    evidence,
    fidelity,
    overview,
    populations,
    routes,
)
from leakpipe.report.figures.style import FULL, Drawing, NothingToDraw, look, write
from leakpipe.report.inputs import PatchReport

FIGURES: dict[str, tuple[str, Callable[[PatchReport, str], Drawing]]] = {
    "detection": (detection.TITLE, detection.draw),
    "populations": (populations.TITLE, populations.draw),
    "chip": (chip.TITLE, chip.draw),
    "fidelity": (fidelity.TITLE, fidelity.draw),
    "routes": (routes.TITLE, routes.draw),
    "correlation": (correlation.TITLE, correlation.draw),
    "evidence": (evidence.TITLE, evidence.draw),
    "readout-overview": (overview.TITLE, overview.draw),
    "readout-clouds": (clouds.TITLE, clouds.draw),
}
"""Figures in the order of the page: name to title and drawing function."""


def write_figures(patch: PatchReport, folder: Path) -> list[FigureFile]:
    """Draw every figure of a patch and write it as SVG and PNG.

    Parameters
    ----------
    patch
        What to draw.
    folder
        Where to; made if missing. Files are called ``<patch>-<basis>-<name>.svg`` and ``.png``.

    Returns
    -------
    figures
        One entry per figure, in the order of the page. A figure whose data are missing has no files
        and says why.
    """
    folder.mkdir(parents=True, exist_ok=True)
    stem = re.sub(r"[^A-Za-z0-9_-]+", "_", f"{patch.patch}-{patch.basis}")
    about = f"{patch.device} · {patch.label} · {patch.calibration_id}"
    written = []
    with look():
        for name, (title, draw) in FIGURES.items():
            try:
                drawing = draw(patch, about)
            except NothingToDraw as reason:
                written.append(FigureFile(name, patch.label, title, missing=str(reason)))
                continue
            svg, png = write(drawing.figure, folder / f"{stem}-{name}")
            written.append(
                FigureFile(
                    name=name,
                    place=patch.label,
                    title=drawing.title,
                    caption=drawing.caption,
                    alt=drawing.alt,
                    wide=bool(drawing.figure.get_figwidth() >= FULL),
                    svg=svg,
                    png=png,
                )
            )
    return written


__all__ = ["FIGURES", "write_figures"]
