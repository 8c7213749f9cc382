"""Kinds of data that a number can rest on, found in the words of its basis."""

from __future__ import annotations

KINDS: dict[str, tuple[str, ...]] = {
    "rise of the means": ("rise", "detection probability", "means"),
    "lag covariances": ("covariance", "correlation", "lag "),
    "leaked readings": ("leaked reading", "measure-qubit reading", "readings of measure"),
    "closing readout": ("closing",),
    "injected runs": ("injected run", "route j"),
    "logical outcomes": ("verdict", "decoder", "matching", "logical outcome"),
    "rehearsal": ("rehearsal", "twin"),
}
"""Kind to the words that give it away, in lower case. Stages write bases in plain sentences; a
basis that holds none of these words is shown as `OTHER`, never dropped."""

OTHER = "other"


def kinds_of(basis: str) -> frozenset[str]:
    """Return the kinds of data that a basis speaks of."""
    said = basis.lower()
    found = {kind for kind, words in KINDS.items() if any(word in said for word in words)}
    return frozenset(found or {OTHER})
