"""The rates stage: injection and seepage per qubit from populations, rise and correlations."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr

from leakpipe.codes.layout import Layout
from leakpipe.config.rates import RatesSettings
from leakpipe.estimates import store
from leakpipe.findings import with_findings
from leakpipe.rates.curves import (
    drawn_curves,
    extra_layers,
    fit_correlations,
    fit_mean,
    interior,
    memory_of_code,
)
from leakpipe.rates.doubts import rate_findings
from leakpipe.rates.jointly import joint_estimates, joint_findings, joint_model, roles_by_joint
from leakpipe.rates.reported import (
    check_estimates,
    code_estimates,
    qubit_estimates,
    role_estimates,
)
from leakpipe.rates.roles import ROLES, data_role, expected_leaked, measure_role
from leakpipe.rates.shapes import shape_report
from leakpipe.rates.transport import transport_excess


def rates(
    detection: xr.Dataset,
    readout: xr.Dataset,
    layout: Layout,
    settings: RatesSettings,
    seed: int,
) -> xr.Dataset:
    """Estimate rise, correlations, and injection and seepage per qubit and role.

    Parameters
    ----------
    detection, readout
        Datasets of those stages.
    layout
        Code layout.
    settings
        The `rates` section.
    seed
        Seed of the draws that later stages use.

    Returns
    -------
    dataset
        Estimates per code, role, qubit and check; curves for the figures; draws.
    """
    rng = np.random.default_rng(seed)
    curves = interior(detection, settings.boundary_rounds + extra_layers(detection))
    mean_rise = fit_mean(curves)
    per_check = [fit_mean(curves, check) for check in range(len(layout.measure))]
    same, pairs = fit_correlations(detection, mean_rise)
    together = memory_of_code(mean_rise, same, pairs)
    measure = measure_role(readout, settings, rng)
    data = data_role(readout, together, measure, settings, rng)
    roles = {"data": data, "measure": measure}
    variables: dict[str, Any] = {}
    variables |= code_estimates(mean_rise, same, together, curves, settings)
    variables |= role_estimates(roles)
    variables |= qubit_estimates(roles)
    variables |= check_estimates(per_check)
    variables |= drawn_curves(detection, curves, mean_rise, same, pairs)
    shape, shape_findings = shape_report(curves)
    variables |= shape
    joint = joint_model(readout, curves, settings)
    variables |= joint_estimates(joint)
    by_joint = [r for r in ROLES if settings.parameters or roles[r].unsettled.any()]
    variables |= roles_by_joint(variables, joint, by_joint)
    transport, transport_z = transport_excess(detection, readout, layout)
    variables |= store("transport", (), transport, units="per leaked reading")
    variables["transport_z"] = ((), transport_z, {"units": "1"})
    rounds = detection["round"].values.astype(float)
    expected = [expected_leaked(roles[role], rounds) for role in ROLES]
    for position, suffix in enumerate(("", "_low", "_high")):
        variables[f"expected_leaked{suffix}"] = (
            ("role", "round"),
            np.stack([one[position] for one in expected]),
            {"units": "1"},
        )
    qubits = [*layout.data, *layout.measure]
    out = xr.Dataset(
        variables,
        coords={
            "qubit": qubits,
            "qubit_role": (
                "qubit",
                ["data"] * len(layout.data) + ["measure"] * len(layout.measure),
            ),
            "role": list(ROLES),
            "check": list(layout.measure),
            "round": detection["round"].values,
            "layer": detection["layer"].values,
            "weight": np.unique(layout.weights),
            "lag": detection["lag"].values,
        },
        attrs={"convention": "discrete, per round: p[r+1] = p[r] + G (1 - p[r]) - S p[r]"},
    )
    findings = [*rate_findings(out, mean_rise, same, transport_z, layout), *shape_findings]
    return with_findings(out, [*findings, *joint_findings(joint, roles, bool(settings.parameters))])
