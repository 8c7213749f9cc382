"""Findings of the rates stage."""

from __future__ import annotations

import numpy as np
import xarray as xr

from leakpipe.codes.layout import Layout
from leakpipe.findings import Finding
from leakpipe.rates.correlation import LagFit
from leakpipe.rates.curves import CORRELATED
from leakpipe.rates.rise import RiseFit
from leakpipe.rates.roles import ROLES

BAD_QUBIT = 0.9
"""Probability of being the worst of its role above which a qubit is named."""
BAD_FACTOR = 2.0
"""A named qubit leaks at least this many times the median of its role."""


def rate_findings(
    out: xr.Dataset, rise: RiseFit, same: LagFit | None, transport_z: float, layout: Layout
) -> list[Finding]:
    """Return what should be known of the rates: odd rises, the leakiest qubit, moving leakage."""
    findings = []
    if rise.status in ("long", "no rise", "falling"):
        words = {
            "long": "the detection probability has not settled by the longest run",
            "no rise": "the detection probability does not rise significantly over rounds",
            "falling": "the detection probability falls over rounds: no leakage building up",
        }
        findings.append(
            Finding(
                f"rise-{rise.status.replace(' ', '-')}",
                "note",
                "code",
                f"The rise: {words[rise.status]}.",
            )
        )
    if same is not None and rise.status == "settled" and same.significance < CORRELATED:
        findings.append(
            Finding(
                "rise-without-correlation",
                "watch",
                "code",
                "The detection probability rises but events two and more rounds apart are not "
                "correlated: heating or a boundary transient rather than leakage.",
                {"z": same.significance},
            )
        )
    for role in ROLES:
        mask = out["qubit_role"].values == role
        levels = out["qubit_steady_leakage"].values[mask]
        if not np.isfinite(levels).any():
            continue
        chance = out["worst_probability"].values[mask]
        at = int(np.nanargmax(chance))
        median = float(np.nanmedian(levels))
        if chance[at] > BAD_QUBIT and levels[at] > BAD_FACTOR * median and levels[at] > 0:
            name = str(out["qubit"].values[mask][at])
            findings.append(
                Finding(
                    "leakiest-qubit",
                    "act",
                    name,
                    f"{name} leaks most of the {role} qubits: steady level {levels[at]:.2%}, "
                    f"{levels[at] / max(median, 1e-9):.1f} times their median "
                    f"({chance[at]:.0%} sure it is the worst). Its gates are with "
                    f"{', '.join(layout.neighbours(name))}.",
                    {
                        "steady_leakage": float(levels[at]),
                        "median": median,
                        "probability": float(chance[at]),
                    },
                )
            )
    if transport_z > CORRELATED:
        findings.append(
            Finding(
                "leakage-moves",
                "act",
                "code",
                "After a leaked reading its neighbours end leaked more often than alone by chance "
                f"(z = {transport_z:.1f}): leakage moves between qubits.",
                {"z": transport_z},
            )
        )
    return findings
