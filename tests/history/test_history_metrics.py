"""The metrics file, read back by a strict reader of the standard's grammar."""

from __future__ import annotations

import numpy as np
import pytest
from history_examples import one_patch, season, summary
from history_openmetrics import read_openmetrics
from hypothesis import given, settings
from hypothesis import strategies as st

from leakpipe.history.metrics import metrics_text
from leakpipe.history.rows import rows_of


def labels(**pairs: str) -> tuple[tuple[str, str], ...]:
    return tuple(sorted(pairs.items()))


def test_every_known_number_is_in_the_exposition_and_no_other() -> None:
    """Values and interval ends come out exactly as they are in the summary."""
    one = summary(0, [one_patch({"D0": 0.01, "M0": None}, basis) for basis in ("Z", "X")])
    families = read_openmetrics(metrics_text([one]))
    place = labels(device="chip", patch="west", basis="Z", qubit="D0", role="data")
    row = next(r for r in rows_of(one) if (r.qubit, r.quantity) == ("D0", "steady_leakage"))
    assert families["leakpipe_qubit_steady_leakage_ratio"].samples[place] == row.value
    assert families["leakpipe_qubit_steady_leakage_low_ratio"].samples[place] == row.low
    assert families["leakpipe_settling_rounds"].unit == "rounds"
    known = sum(x is not None for r in rows_of(one) for x in (r.value, r.low, r.high))
    about_epoch = ("leakpipe_acquired_at_seconds", "leakpipe_made_at_seconds", "leakpipe_findings")
    told = sum(len(f.samples) for name, f in families.items() if name not in about_epoch)
    assert told == known
    assert not [
        key
        for key in families["leakpipe_qubit_steady_leakage_ratio"].samples
        if ("qubit", "M0") in key
    ]


def test_findings_are_counted_by_severity() -> None:
    """An alert can be set on the number of findings to act on."""
    one = summary(0, [one_patch({"D0": 0.01})])
    one["findings"] = [
        {"code": "a", "severity": "act", "where": "D0", "sentence": "S.", "numbers": {}}
    ] * 2
    samples = read_openmetrics(metrics_text([one]))["leakpipe_findings"].samples
    assert samples[labels(device="chip", patch="west", severity="act")] == 2
    assert samples[labels(device="chip", patch="west", severity="watch")] == 0


@settings(deadline=None, max_examples=50)
@given(
    st.text(
        st.characters(blacklist_categories=("Cs",)) | st.sampled_from('\\"\n{}=,# '),
        min_size=1,
        max_size=20,
    )
)
def test_names_of_any_text_survive(name: str) -> None:
    """Quotes, backslashes, line breaks and braces in names neither break the file nor get lost."""
    one = summary(0, [one_patch({"D0": 0.01}, patch=name)], device=name)
    families = read_openmetrics(metrics_text([one]))
    told = {dict(key)["patch"] for key in families["leakpipe_leakage_share_ratio"].samples}
    assert told == {name}


def test_several_patches_share_families() -> None:
    """Samples of one family stand together however many patches there are."""
    ones = [summary(0, [one_patch({"D0": 0.01}, patch=name)]) for name in ("west", "east")]
    families = read_openmetrics(metrics_text(ones))
    assert len(families["leakpipe_leakage_share_ratio"].samples) == 2


def test_an_empty_exposition_is_valid() -> None:
    """No results yet: only the end mark."""
    assert metrics_text([]) == "# EOF\n"
    assert read_openmetrics("# EOF\n") == {}


@pytest.mark.parametrize(
    "broken",
    [
        "a 1\n# EOF\n",
        "# TYPE a gauge\na 1\n",
        '# TYPE a gauge\na{b="c} 1\n# EOF\n',
        '# TYPE a gauge\na{b="c",} 1\n# EOF\n',
        "# TYPE a gauge\na  1\n# EOF\n",
        "# TYPE a gauge\na one\n# EOF\n",
        "# TYPE a gauge\na 1\na 2\n# EOF\n",
        "# TYPE a gauge\n# UNIT a seconds\na 1\n# EOF\n",
        "# TYPE a gauge\na 1\n# TYPE b gauge\nb 1\na 2\n# EOF\n",
        '# TYPE a gauge\na{b="\\x"} 1\n# EOF\n',
        "# TYPE a gauge\n\na 1\n# EOF\n",
    ],
)
def test_the_reader_itself_refuses_what_the_grammar_forbids(broken: str) -> None:
    """A reader that takes anything would prove nothing."""
    with pytest.raises(ValueError, match=r"."):
        read_openmetrics(broken)


def test_a_whole_season_reads_back() -> None:
    """Metrics of every night of a made-up season keep the grammar."""
    for one in season(5, np.random.default_rng(1), bases=("Z", "X")):
        assert read_openmetrics(metrics_text([one]))
