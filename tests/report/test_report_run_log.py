"""The run-log block and its JSON line."""

import json
from dataclasses import replace

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from report_examples import layouts, patch_report

from leakpipe.findings import Finding
from leakpipe.report.run_log import json_line, run_log_block
from leakpipe.report.summary import summary


def fits(block: str) -> bool:
    """Whether a block keeps its frame."""
    lines = block.splitlines()
    return len(lines) <= 25 and max(map(len, lines)) <= 78


def test_block_answers_the_questions_in_order(patch):
    """Verdict first, then rise, levels, error and share, qubits, changes, unknowns, caution."""
    block = run_log_block(summary([patch]), [])
    starts = [line.split()[0] for line in block.splitlines() if not line.startswith(" ")]
    assert starts == [
        "ACT", "epoch", "rise", "leaked", "logical", "share", "look", "act", "watch", "changed",
        "cannot", "caution",
    ]  # fmt: skip
    assert fits(block)
    assert "data 1.03 % (0.91 to 1.15)" in block
    assert "+11.8 % (10.6 to 13.0)" in block


def test_worst_qubit_is_named(patch):
    """The qubit that was given several times the leakage of its kind is the one to look at."""
    block = run_log_block(summary([patch]))
    line = next(line for line in block.splitlines() if line.startswith("look at"))
    assert line.split()[2] == "D3"


def test_verdict_words(patch, bare):
    """ACT, WATCH, QUIET follow the findings; BLIND where nothing could be told."""
    quiet = summary([patch])
    quiet["findings"] = []
    watch = summary([patch])
    watch["findings"] = [f for f in watch["findings"] if f["severity"] == "watch"]
    words = [run_log_block(s).split()[0] for s in (summary([patch]), watch, quiet)]
    assert words == ["ACT", "WATCH", "QUIET"]
    assert run_log_block(summary([bare])).startswith("BLIND")


def test_changes_are_told_apart(patch):
    """No earlier epoch, no change, and a change read differently; a change is told only once."""
    change = Finding("change", "watch", "D3", "D3 rose from 0.9 % to 3.2 % (z = 6.1)")
    made = summary([patch], [change])
    assert "not compared with an earlier epoch" in run_log_block(made, None)
    assert "nothing beyond noise" in run_log_block(made, [])
    assert run_log_block(made, [change]).count("D3 rose from") == 1


@pytest.mark.parametrize("name", list(layouts()))
@pytest.mark.parametrize("count", [1, 2, 5, 12])
def test_frame_holds_for_many_patches(name, count):
    """Up to a dozen patches and bases and 49 qubits, the block stays 25 lines of 78 columns."""
    one = patch_report(layout=layouts()[name])
    patches = [replace(one, basis="ZX"[i % 2], patch=f"patch {i // 2}") for i in range(count)]
    block = run_log_block(summary(patches))
    assert fits(block)
    assert block.splitlines()[-1].strip().endswith("hardware settings.")


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=20)
@given(name=st.text(max_size=300), sentence=st.text(max_size=2000), amount=st.integers(0, 40))
def test_frame_holds_for_any_text(patch, name, sentence, amount):
    """Names and sentences of any length and any characters cannot break the frame."""
    findings = tuple(
        Finding("any", "act" if i % 2 else "watch", f"{name}{i}", sentence) for i in range(amount)
    )
    odd = replace(patch, device=name, patch=name, findings=findings)
    assert fits(run_log_block(summary([odd])))


def test_json_line_is_one_line(patch):
    """The JSON line reads back to the summary and holds exactly one line break, at its end."""
    made = summary([replace(patch, device="two\nlines")])
    line = json_line(made)
    assert line.endswith("\n")
    assert line.count("\n") == 1
    assert json.loads(line) == made


def test_json_line_refuses_nan(patch):
    """JSON has no NaN; writing one is a fault that must show."""
    made = summary([patch])
    made["patches"][0]["kappa"]["value"] = float("nan")
    with pytest.raises(ValueError, match="not JSON compliant"):
        json_line(made)
