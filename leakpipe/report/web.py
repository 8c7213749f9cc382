"""The template environment of both pages: everything escaped unless it is our own drawing."""

from __future__ import annotations

import base64
import hashlib
from functools import cache
from importlib.resources import files
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from leakpipe import __version__
from leakpipe.report.palette import variables
from leakpipe.report.wording import count, moment

CAUTION = (
    "The estimates rest on stated assumptions. Check them against local practice and a responsible "
    "operator's judgement before changing hardware settings."
)


@cache
def _environment() -> Environment:
    made = Environment(
        loader=PackageLoader("leakpipe.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.filters |= {"moment": moment, "count": count, "sentence": capitalised}
    return made


def capitalised(text: str) -> str:
    """Return the text with its first letter in upper case, the rest as it is."""
    return text[:1].upper() + text[1:]


def rendered(template: str, content: dict[str, Any]) -> str:
    """Return a page made from one of our templates.

    The only script is ours; the page's policy names its hash, so that no other can run.
    """
    script = files("leakpipe.report").joinpath("templates/sort.js").read_text(encoding="utf-8")
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    return (
        _environment()
        .get_template(template)
        .render(
            **content,
            version=__version__,
            light=variables(dark=False),
            dark=variables(dark=True),
            script=Markup(script),
            script_hash=f"sha256-{digest}",
        )
    )
