"""`summary.json`: contract, missing stages, findings."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from pydantic import ValidationError
from report_examples import layouts, patch_report

from leakpipe.estimates import Estimate
from leakpipe.findings import Finding
from leakpipe.report.contract import schema, validated
from leakpipe.report.summary import summary

SCHEMA = Path(__file__).parents[2] / "shared" / "summary.schema.json"

DESIGN_KEYS = {
    "contract device calibration_id acquired_at made_at patches findings": "top",
    "patch family distance basis shots rounds logical_error_per_round leakage_share share_routes "
    "detection_rise settling_rounds kappa steady_leakage injection seepage qubits": "patch",
    "qubit role steady_leakage injection seepage settling_rounds assignment": "qubit",
    "value low high level identifiable basis": "estimate",
    "code severity where sentence numbers": "finding",
}
"""Keys of contract "1", typed from the design page and not taken from the code."""


def test_keys_are_those_of_the_design(patch):
    """The summary has exactly the keys that the contract lists, at every level."""
    made = summary([patch])
    levels = {
        "top": made,
        "patch": made["patches"][0],
        "qubit": made["patches"][0]["qubits"][0],
        "estimate": made["patches"][0]["kappa"],
        "finding": made["findings"][0],
    }
    for keys, level in DESIGN_KEYS.items():
        assert set(levels[level]) == set(keys.split())


def test_schema_file_is_current():
    """The schema that other programs read is the one the models make."""
    assert json.loads(SCHEMA.read_text()) == schema()


@pytest.mark.parametrize("name", list(layouts()))
def test_schema_file_accepts_the_summary(name):
    """The schema file itself, read by a small checker of our own, accepts every summary we make."""
    rules = json.loads(SCHEMA.read_text())
    made = json.loads(json.dumps(summary([patch_report(layout=layouts()[name])]), allow_nan=False))
    assert not list(_deviations(made, rules, rules["$defs"], "$"))


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("contract",), "2"),
        (("patches", 0, "kappa", "value"), "0.98"),
        (("patches", 0, "basis"), "Y"),
        (("findings", 0, "severity"), "loud"),
        (("patches", 0, "shots"), 1.5),
        (("patches", 0, "kappa", "comment"), "new"),
        (("device",), None),
    ],
)
def test_schema_and_models_refuse_the_same(patch, path, value):
    """A deviation is refused by the schema file and by the models alike."""
    made = json.loads(json.dumps(summary([patch])))
    place = made
    for step in path[:-1]:
        place = place[step]
    place[path[-1]] = value
    rules = json.loads(SCHEMA.read_text())
    assert list(_deviations(made, rules, rules["$defs"], "$"))
    with pytest.raises(ValidationError):
        validated(made)


def test_not_finite_is_refused(patch):
    """NaN and infinity never reach the file."""
    for bad in (float("nan"), float("inf")):
        made = summary([patch])
        made["patches"][0]["kappa"]["value"] = bad
        with pytest.raises(ValidationError):
            validated(made)


def test_missing_stages_are_said_not_filled_in(bare):
    """Without any stage every estimate is null, not identifiable, and names the missing stage."""
    made = summary([bare])["patches"][0]
    for name in ("logical_error_per_round", "leakage_share", "kappa"):
        assert made[name]["value"] is None
        assert not made[name]["identifiable"]
        assert "no result of the" in made[name]["basis"]
    assert len(made["qubits"]) == 17
    assert all(qubit["assignment"] is None for qubit in made["qubits"])
    assert made["share_routes"] == {}


@pytest.mark.parametrize("missing", ["model", "readout", "rates", "logical", "share"])
def test_any_one_stage_may_be_missing(missing):
    """The loss of one stage leaves the numbers of the others alone."""
    whole = patch_report()
    left = {name: data for name, data in whole.stages.items() if name != missing}
    made = summary([replace(whole, stages=left)])["patches"][0]
    full = summary([whole])["patches"][0]
    assert (made["kappa"] == full["kappa"]) == (missing != "rates")
    assert (made["leakage_share"] == full["leakage_share"]) == (missing != "share")


def test_values_are_those_of_the_datasets(patch):
    """What the summary says is what the stage stored, per qubit and per role."""
    made = summary([patch])["patches"][0]
    stored = patch.stages["rates"]
    for qubit in made["qubits"]:
        value = stored["qubit_steady_leakage"].sel(qubit=qubit["qubit"]).item()
        assert qubit["steady_leakage"]["value"] == value
    assert (
        made["seepage"]["measure"]["high"] == stored["seepage_high"].sel(role_name="measure").item()
    )


@pytest.mark.parametrize("dim", ["role", "role_name"])
def test_both_names_of_the_role_dimension(patch, dim):
    """The dimension over the two roles is found under either of its names."""
    stored = patch.stages["rates"].drop_vars("role").rename(role_name=dim)
    made = summary([replace(patch, stages={**patch.stages, "rates": stored})])["patches"][0]
    assert made["steady_leakage"] == summary([patch])["patches"][0]["steady_leakage"]


def test_value_without_identifiability_is_dropped(patch):
    """A stage that stored a value but says it is not identifiable is taken at its word."""
    stored = patch.stages["rates"].copy(deep=True)
    stored["kappa_identifiable"] = 0
    made = summary([replace(patch, stages={**patch.stages, "rates": stored})])
    kappa = made["patches"][0]["kappa"]
    assert kappa["value"] is None
    assert kappa["low"] is not None


def test_findings_once_and_sorted(patch):
    """A finding of both bases stands once, one of a single basis says which, severest first."""
    only_x = Finding("odd", "act", "M1", "Only here.", {"z": np.float64("nan"), "n": np.int64(3)})
    other = replace(patch, basis="X", findings=(only_x,))
    made = summary([patch, other])["findings"]
    assert [finding["severity"] for finding in made] == ["act", "act", "watch"]
    assert [f["where"] for f in made if f["code"] == "odd"] == ["west X: M1"]
    assert [f["where"] for f in made if f["code"] == "leakage-outlier"] == ["D3"]
    assert next(f for f in made if f["code"] == "odd")["numbers"] == {"z": None, "n": 3}


def test_one_epoch_at_a_time(patch):
    """Patches of different calibrations are refused, and so is no patch at all."""
    with pytest.raises(ValueError, match="different epochs"):
        summary([patch, replace(patch, calibration_id="another")])
    with pytest.raises(ValueError, match="at least one"):
        summary([])


def test_limits_survive(patch):
    """An upper limit keeps its high end although there is no value."""
    limit = Estimate.upper_limit(0.02, "below detection")
    assert limit.to_json()["high"] == 0.02
    validated({**summary([patch]), "findings": []})


def _deviations(value, rules, shared, path):
    """Yield where a value breaks a JSON Schema, for the keywords that our schema uses."""
    if "$ref" in rules:
        rules = shared[rules["$ref"].rsplit("/", 1)[-1]]
    if "anyOf" in rules:
        if not any(not list(_deviations(value, one, shared, path)) for one in rules["anyOf"]):
            yield f"{path}: fits none of the alternatives"
        return
    if "const" in rules and value != rules["const"]:
        yield f"{path}: not {rules['const']!r}"
    if "enum" in rules and value not in rules["enum"]:
        yield f"{path}: not one of {rules['enum']}"
    kinds = {
        "object": dict, "array": list, "string": str, "boolean": bool, "null": type(None),
        "integer": int, "number": (int, float),
    }  # fmt: skip
    kind = rules.get("type")
    wrong = kind and (not isinstance(value, kinds[kind]))
    if wrong or (kind in ("integer", "number") and isinstance(value, bool)):
        yield f"{path}: not a {kind}"
        return
    if kind == "object":
        named = rules.get("properties", {})
        for name in rules.get("required", []):
            if name not in value:
                yield f"{path}.{name}: missing"
        for name, part in value.items():
            inside = named.get(name, rules.get("additionalProperties", True))
            if inside is False:
                yield f"{path}.{name}: unknown"
            elif isinstance(inside, dict):
                yield from _deviations(part, inside, shared, f"{path}.{name}")
    if kind == "array":
        for place, part in enumerate(value):
            yield from _deviations(part, rules["items"], shared, f"{path}[{place}]")
