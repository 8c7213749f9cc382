"""Invented stage datasets that follow docs/architecture.md, for the tests of the report.

Every number here is made up (drawn around round values); none was measured on a device, and none is
an expected value of a stage. The report only has to show them.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from leakpipe.codes.layout import Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.estimates import Estimate, store
from leakpipe.findings import Finding, with_findings
from leakpipe.report.inputs import PatchReport

ROUNDS = (1, 3, 5, 9, 13, 17, 25)
T95 = 1.96
BAD = 3
"""Index of the data qubit that leaks several times more than the others."""


def _around(value: float, relative: float, basis: str) -> Estimate:
    return Estimate.from_error(value, relative * value, basis)


def _roles(layout: Layout) -> tuple[list[str], list[str]]:
    qubits = [*layout.data, *layout.measure]
    return qubits, ["data"] * len(layout.data) + ["measure"] * len(layout.measure)


def model(layout: Layout, rng: np.random.Generator) -> xr.Dataset:
    """An invented readout model: three clouds per qubit."""
    qubits, _ = _roles(layout)
    angle = rng.uniform(0, 2 * np.pi, len(qubits))
    turn = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    side = np.stack([-np.sin(angle), np.cos(angle)], axis=-1)
    means = np.stack([-2.4 * turn, 2.4 * turn, 2.4 * turn + 3.9 * side], axis=1)
    covariance = np.broadcast_to(np.eye(2), (len(qubits), 2, 2)) * rng.uniform(
        0.85, 1.2, (len(qubits), 1, 1)
    )
    right = rng.uniform(0.965, 0.99, len(qubits))
    table = np.full((len(qubits), 3, 3), 0.01)
    for state in range(3):
        table[:, state, state] = right - 0.01 * state
    return xr.Dataset(
        {
            "mean": (("qubit", "state", "feature"), means),
            "covariance": (("qubit", "feature", "feature_2"), covariance),
            "assignment": (("qubit", "state", "label"), table + 0.004 * np.eye(3)),
            "assignment_as_prepared": (("qubit", "prepared", "label"), table),
            "preparation_weight": (("qubit", "prepared", "state"), table + 0.005 * np.eye(3)),
            "shots": (("qubit", "prepared"), np.full((len(qubits), 3), 10_000.0)),
            "decay": (("qubit", "tail"), rng.uniform(0.005, 0.03, (len(qubits), 2))),
            "error_ratio": ("qubit", rng.uniform(1.0, 1.6, len(qubits))),
            "missing": ("qubit", np.zeros(len(qubits))),
            "usable": ("qubit", np.ones(len(qubits), np.int8)),
        },
        coords={
            "qubit": qubits,
            "state": [0, 1, 2],
            "label": [0, 1, 2],
            "tail": ["1 to 0", "2 to 1"],
        },
        attrs={"working_prior": "0.6 0.39 0.01"},
    )


def readout(
    layout: Layout, rng: np.random.Generator, rounds: Sequence[int], usable: bool
) -> xr.Dataset:
    """Invented leaked populations that build up over five rounds."""
    qubits, roles = _roles(layout)
    longest = max(rounds)
    names = [f"memory-R{count:02d}" for count in rounds]
    curve = 0.004 * (1 - 0.8 ** np.arange(1, longest + 1))
    spread = rng.lognormal(0, 0.3, len(layout.measure))
    leaked = curve[None, :, None] * spread + rng.normal(
        0, 3e-4, (len(rounds), longest, spread.size)
    )
    for row, count in enumerate(rounds):
        leaked[row, count:] = np.nan
    closing = 0.0105 * (1 - 0.8 ** np.array(rounds))[:, None] * np.ones(len(layout.data))
    closing += rng.normal(0, 5e-4, closing.shape)
    full = ("recording", "round", "measure")
    ends = ("recording", "data")
    data = xr.Dataset(
        {
            "leaked": (full, leaked),
            "leaked_shot_error": (full, np.full(leaked.shape, 3e-4)),
            "leaked_calibration_error": (full, np.full(leaked.shape, 1e-4)),
            "closing_leaked": (ends, closing),
            "closing_leaked_shot_error": (ends, np.full(closing.shape, 5e-4)),
            "closing_leaked_calibration_error": (ends, np.full(closing.shape, 1e-4)),
            "phi": (("recording", "qubit"), rng.uniform(0, 2e-3, (len(rounds), len(qubits)))),
            "usable": ("qubit", np.full(len(qubits), int(usable), np.int8)),
            "usable_reason": ("qubit", ["" if usable else "no |2> was prepared"] * len(qubits)),
        },
        coords={
            "recording": names,
            "rounds": ("recording", list(rounds)),
            "shots": ("recording", [20_000] * len(rounds)),
            "injected": ("recording", [0] * len(rounds)),
            "round": np.arange(1, longest + 1),
            "measure": list(layout.measure),
            "data": list(layout.data),
            "qubit": qubits,
            "role": ("qubit", roles),
        },
    )
    if usable:
        return data
    # What an unusable population holds is no number anybody may show.
    return data.assign({name: data[name] * 0 + 0.5 for name in data.data_vars if "leaked" in name})


def _stored(dim: str, estimates: dict[str, list[Estimate]]) -> dict:
    stored: dict = {}
    for name, cells in estimates.items():
        stored |= store(name, (dim,), cells)
    return stored


def rates(layout: Layout, rng: np.random.Generator, longest: int, usable: bool) -> xr.Dataset:
    """Invented rates around 1 % of steady leakage and five rounds of settling."""
    qubits, roles = _roles(layout)
    data_count = len(layout.data)
    level = np.concatenate(
        [
            0.0095 * rng.lognormal(0, 0.2, data_count),
            0.0041 * rng.lognormal(0, 0.2, len(qubits) - data_count),
        ]
    )
    level[BAD] *= 3.5
    seepage = 0.19 * rng.lognormal(0, 0.1, len(qubits))
    where = "pair covariances, means, closing readout"
    per_qubit = {
        "qubit_steady_leakage": [_around(v, 0.1, where) for v in level],
        "qubit_injection": [
            _around(v * s, 0.15, where) for v, s in zip(level, seepage, strict=True)
        ],
        "qubit_seepage": [_around(s, 0.15, where) for s in seepage],
        "qubit_settling_rounds": [_around(1 / s, 0.2, "pair covariances") for s in seepage],
    }
    unknown = Estimate.unknown("no leaked readings and a covariance below three sigma")
    per_qubit["qubit_injection"][-1] = unknown
    per_qubit["qubit_settling_rounds"][-1] = unknown
    lam = 0.82
    weights = sorted(set(layout.weights.tolist()))
    layers = np.arange(1, longest + 2)
    start = np.array([0.09 + 0.02 * weight for weight in weights])[:, None]
    smooth = start * (1 + 0.12 * (1 - lam ** np.arange(longest)))
    mean = start * (1 + 0.12 * (1 - lam ** (layers - 1.0)))
    mean[:, [0, -1]] *= 0.6
    mean += rng.normal(0, 4e-4, mean.shape)
    lags = np.arange(9)
    law = 0.004 * lam**lags
    rise = 1 - lam ** np.arange(1, longest + 1)
    expected = np.array([0.0103, 0.0042])[:, None] * rise
    reading = "leaked readings"
    by_role = {
        "steady_leakage": [_around(0.0103, 0.06, where), _around(0.0042, 0.05, reading)],
        "injection": [_around(0.00195, 0.08, where), _around(0.0008, 0.09, reading)],
        "seepage": [
            _around(0.18, 0.07, "lag covariances"),
            _around(0.19, 0.08, reading) if usable else unknown,
        ],
    }
    worst = np.full(len(qubits), 0.01)
    worst[BAD] = 0.97
    out = xr.Dataset(
        {
            **store("detection_rise", (), _around(0.118, 0.05, "rise of the means")),
            **store("settling_rounds", (), _around(5.1, 0.06, "rise and lag covariances")),
            **store("kappa", (), _around(0.98, 0.06, "rise and lag covariances")),
            **{
                k: v
                for name, cells in by_role.items()
                for k, v in store(name, ("role_name",), cells).items()
            },
            **{
                k: v
                for name, cells in per_qubit.items()
                for k, v in store(name, ("qubit",), cells).items()
            },
            "mean_detection": (("weight", "layer"), mean),
            "mean_detection_error": (("weight", "layer"), np.full(mean.shape, 4e-4)),
            "fit_detection": (("weight", "round"), smooth),
            "fit_detection_low": (("weight", "round"), smooth - 3e-4),
            "fit_detection_high": (("weight", "round"), smooth + 3e-4),
            "lag_covariance": ("lag", law + rng.normal(0, 5e-5, lags.size) + (lags < 2) * 0.02),
            "lag_covariance_error": ("lag", np.full(lags.size, 5e-5)),
            "lag_covariance_fit": ("lag", law),
            "expected_leaked": (("role_name", "round"), expected),
            "expected_leaked_low": (("role_name", "round"), expected * 0.9),
            "expected_leaked_high": (("role_name", "round"), expected * 1.1),
            "worst_probability": ("qubit", worst),
        },
        coords={
            "qubit": qubits,
            "role": ("qubit", roles),
            "weight": weights,
            "layer": layers,
            "round": np.arange(1, longest + 1),
            "lag": lags,
            "role_name": ["data", "measure"],
        },
    )
    finding = Finding(
        "leakage-outlier",
        "act",
        qubits[BAD],
        f"{qubits[BAD]} leaks {100 * level[BAD]:.1f} %, 3.5 times the median data qubit; "
        "look at its couplers.",
        {"steady_leakage": float(level[BAD])},
    )
    doubt = Finding(
        "null-direction",
        "watch",
        "code",
        "Means alone cannot tell the two sublattices apart; the numbers per qubit rest on "
        "covariances.",
    )
    return with_findings(out, [finding, doubt])


def logical(rounds: Sequence[int], eps: float, rng: np.random.Generator) -> xr.Dataset:
    """An invented exponential decay of the logical fidelity."""
    counts = np.array(rounds)
    error = np.full(counts.size, 0.0025)
    failed = 0.5 * (1 - 0.99 * (1 - 2 * eps) ** counts) + rng.normal(0, 0.0015, counts.size)
    failed = np.clip(failed, 1e-4, 0.5)
    axis = np.arange(1, max(rounds) + 1)
    basis = f"verdicts of {counts.size} durations, R from 3 to {max(rounds)}"
    return xr.Dataset(
        {
            "logical_error": ("recording", failed),
            "logical_error_error": ("recording", error),
            **store("logical_error_per_round", (), _around(eps, 0.015, basis)),
            **store("amplitude", (), _around(0.99, 0.004, basis)),
            "fit_fidelity": ("rounds_axis", 0.99 * (1 - 2 * eps) ** axis),
            "scatter": ((), 0.001),
            "chi_square": ((), 5.2),
            "freedom": ((), 4),
        },
        coords={
            "recording": [f"memory-R{count:02d}" for count in rounds],
            "rounds": ("recording", counts),
            "shots": ("recording", [20_000] * counts.size),
            "injected": ("recording", [0] * counts.size),
            "rounds_axis": axis,
        },
        attrs={"range_of_rounds": f"3 to {max(rounds)}"},
    )


def share(rounds: Sequence[int], eps: float) -> xr.Dataset:
    """Invented routes of the share that agree within their errors."""
    counts = np.array(rounds)
    routes = {
        "readings": _around(0.121, 0.09, "leaked readings and closing readout"),
        "injected": Estimate.unknown("no injected runs"),
        "twin": Estimate(0.128, 0.095, 0.16, 0.95, True, "rehearsal set to the fitted rates"),
    }
    without = eps * (1 - 0.121)
    return xr.Dataset(
        {
            **store(
                "leakage_share",
                (),
                Estimate(0.121, 0.092, 0.15, 0.95, True, "leaked readings and closing readout"),
            ),
            **store(
                "leakage_share_statistical",
                (),
                _around(0.121, 0.07, "leaked readings and closing readout"),
            ),
            **store("share_route", ("route",), list(routes.values())),
            **store(
                "per_round_without",
                (),
                _around(without, 0.02, "leaked readings and closing readout"),
            ),
            "fidelity_without": ("recording", 0.99 * (1 - 2 * without) ** counts),
        },
        coords={
            "recording": [f"memory-R{count:02d}" for count in rounds],
            "rounds": ("recording", counts),
            "route": list(routes),
        },
    )


def patch_report(
    *,
    layout: Layout | None = None,
    basis: str = "Z",
    rounds: Sequence[int] = ROUNDS,
    usable: bool = True,
    seed: int = 7,
    stages: Sequence[str] = ("model", "readout", "rates", "logical", "share"),
) -> PatchReport:
    """Return an invented patch of a distance-3 surface code, or of the layout given."""
    layout = layout or rotated_surface(3)
    rng = np.random.default_rng(seed)
    eps = 0.0291
    made = {
        "model": model(layout, rng),
        "readout": readout(layout, rng, rounds, usable),
        "rates": rates(layout, rng, max(rounds), usable),
        "logical": logical(rounds, eps, rng),
        "share": share(rounds, eps),
    }
    return PatchReport(
        device="invented device",
        calibration_id="cal-0412",
        acquired_at="2026-11-30T21:04:00+00:00",
        made_at="2026-11-30T21:31:12+00:00",
        patch="west",
        family=layout.family,
        distance=layout.distance,
        basis=basis,
        shots=20_000 * len(rounds),
        rounds=tuple(rounds),
        layout=layout,
        stages={name: made[name] for name in stages},
        config_text="# invented\nseed: 7\nrates:\n  boundary_rounds: 1\n",
        input_hashes={"calibration.nc": "sha256:0f3a", "memory-R01.nc": "sha256:77c1"},
        versions={"leakpipe": "0.1.0", "numpy": "2.1"},
        seed=seed,
    )


def renamed(layout: Layout, old: str, new: str) -> Layout:
    """Return the layout with one qubit under another name."""
    from dataclasses import replace

    def swap(names: tuple[str, ...]) -> tuple[str, ...]:
        return tuple(new if name == old else name for name in names)

    return replace(layout, data=swap(layout.data), measure=swap(layout.measure))


def layouts() -> dict[str, Layout]:
    """The layouts every figure has to survive: small, line, 49 qubits."""
    return {
        "surface 3": rotated_surface(3),
        "repetition 5": repetition(5),
        "surface 5": rotated_surface(5),
    }


def season(epochs: int = 12, qubits: Sequence[str] = ("D3",)) -> list[dict]:
    """Return invented history rows: one code quantity and one per qubit, one epoch unknown."""
    rows = []
    for number in range(epochs):
        levels = [(name, "steady_leakage", 0.01 + 0.001 * i) for i, name in enumerate(qubits)]
        for name, quantity, value in [(None, "leakage_share", 0.12), *levels]:
            known = number != 3
            rows.append(
                {
                    "epoch": f"cal-{number:04d}",
                    "acquired_at": f"2026-11-{number + 1:02d}T02:00:00+00:00",
                    "patch": "west",
                    "qubit": name,
                    "quantity": quantity,
                    "value": value if known else None,
                    "low": value * 0.9 if known else None,
                    "high": value * 1.1 if known else None,
                    "flags": ["jump"] if number == 8 and name else [],
                }
            )
    return rows
