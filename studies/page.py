"""Both pages in a real browser: do they fit, load nothing from outside, and follow the dark?

Needs a `chromium` on the path; without one the study fails, because nothing was checked. Pages are
made from the invented datasets of `tests/report/report_examples.py`.
"""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
import tempfile
from html import escape
from pathlib import Path

import numpy as np

ROOT = Path(__file__).parents[1]
WIDTHS = (360, 390, 768, 1280)
WAIT = 120
"""Seconds that one page may take."""

PROBE = """
<script>
addEventListener("load", () => {
  const root = document.documentElement;
  const wide = [...document.querySelectorAll("body *")].filter((one) => {
    const box = one.getBoundingClientRect();
    return box.width > 1 && box.right > root.clientWidth + 1 && !one.closest("svg");
  });
  const style = getComputedStyle(document.body);
  const table = document.querySelector("table.sortable");
  const head = table?.querySelector("thead button");
  let sorted = null;
  if (table && table.tBodies[0].rows.length > 1) {
    const first = () => document.querySelector("table.sortable tbody th").textContent;
    head.click(); const a = first(); head.click(); const b = first();
    sorted = a !== b;
  }
  parent.document.documentElement.dataset.probe = JSON.stringify({
    scroll: root.scrollWidth, client: root.clientWidth, wide: wide.length,
    background: style.backgroundColor, colour: style.color, sorted,
    drawings: [...document.querySelectorAll("figure svg")].filter(
      (one) => one.getBoundingClientRect().height > 40).length,
  });
});
</script>
"""


def browser(page: Path, width: int, *extra: str) -> tuple[str, str]:
    """Open a page without a screen; return its document and the log of its network requests."""
    with tempfile.TemporaryDirectory() as profile:
        log = Path(profile) / "net.json"
        command = [
            "chromium", "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic",
            "--no-first-run", "--disable-background-networking", "--disable-component-update",
            "--disable-sync", f"--user-data-dir={profile}/profile", f"--log-net-log={log}",
            # Nothing leaves the machine, whatever the browser itself would like to ask its maker.
            "--host-resolver-rules=MAP * ~NOTFOUND",
            f"--window-size={width},2000", *extra, "--dump-dom", page.as_uri(),
        ]  # fmt: skip
        done = subprocess.run(command, capture_output=True, text=True, timeout=WAIT, check=True)
        return done.stdout, log.read_text(errors="replace") if log.exists() else ""


def requested(log: str) -> set[str]:
    """Return the addresses asked for over the network, queries cut off (random parts)."""
    try:
        events = json.loads(log)["events"]
    except (json.JSONDecodeError, KeyError):
        # The browser was ended before it closed its log: read the lines that are there.
        events = [json.loads(line.rstrip(",")) for line in log.splitlines() if '"url":' in line]
    addresses = {str(event.get("params", {}).get("url", "")) for event in events}
    outside = ("http:", "https:", "ws:", "wss:")
    return {one.split("?")[0] for one in addresses if one.startswith(outside)}


def probed(page: Path, width: int, *extra: str) -> dict[str, object]:
    """Measure a page inside a frame of the given width.

    A window without a screen cannot be narrower than 500 pixels, a frame can; queries for the width
    see the frame. The measured copy carries the probe, which the page's own policy would refuse.
    """
    html = page.read_text()
    html = re.sub(r'<meta http-equiv="Content-Security-Policy"[^>]*>', "", html, count=1)
    inside = escape(html.replace("</body>", f"{PROBE}</body>"))
    host = page.with_name(f"host-{page.name}")
    host.write_text(
        f'<!DOCTYPE html><iframe width="{width}" height="1500" style="border: 0" '
        f'srcdoc="{inside}"></iframe>'
    )
    document, _ = browser(host, width + 100, *extra)
    match = re.search(r'data-probe="([^"]*)"', document)
    if match is None:
        raise RuntimeError(f"{page.name}: the probe did not run")
    return dict(json.loads(match.group(1).replace("&quot;", '"')))


def make_pages(folder: Path) -> list[Path]:
    """Write the pages to look at."""
    sys.path.insert(0, str(ROOT / "tests" / "report"))
    from report_examples import layouts, patch_report, season

    from leakpipe.report.epochs import epochs_page
    from leakpipe.report.figures import write_figures
    from leakpipe.report.page import page
    from leakpipe.report.summary import summary

    pages = []
    for name, layout in layouts().items():
        patch = patch_report(layout=layout)
        html = page(summary([patch]), [patch], write_figures(patch, folder / name))
        pages.append(folder / f"{name.replace(' ', '-')}.html")
        pages[-1].write_text(html)
    bare = patch_report(stages=())
    pages.append(folder / "bare.html")
    pages[-1].write_text(page(summary([bare]), [bare], write_figures(bare, folder / "bare")))
    pages.append(folder / "epochs.html")
    pages[-1].write_text(epochs_page(season(30, ["D0", "D1", "D2"]), []))
    return pages


def main() -> int:
    """Check every page at every width; print a line for each check that fails, and a table."""
    if shutil.which("chromium") is None:
        print("no chromium on the path: nothing was checked")
        return 1
    failed = 0
    with tempfile.TemporaryDirectory() as place:
        empty, calling = Path(place) / "empty.html", Path(place) / "calling.html"
        empty.write_text("<!DOCTYPE html><title>nothing</title>")
        calling.write_text('<!DOCTYPE html><title>calls</title><img src="http://a.invalid/x.png">')
        # Two looks at an empty page: the browser does not ask for the same things every time.
        own = requested(browser(empty, 1280)[1]) | requested(browser(empty, 1280)[1])
        caught = requested(browser(calling, 1280)[1]) - own == {"http://a.invalid/x.png"}
        failed += not caught
        print(f"control: a page that calls outside is caught: {'ok' if caught else 'FAILED'}")
        for page in make_pages(Path(place)):
            for width in WIDTHS:
                seen = probed(page, width)
                fits = seen["scroll"] <= seen["client"] and seen["wide"] == 0  # type: ignore[operator]
                sorts = seen["sorted"] in (True, None)
                failed += (not fits) + (not sorts)
                print(
                    f"{page.name:18s} {width:5d} px: content {seen['scroll']} in {seen['client']}, "
                    f"{seen['drawings']} drawings, sorting {seen['sorted']}: "
                    f"{'ok' if fits and sorts else 'FAILED'}"
                )
            light = probed(page, 1280, "--blink-settings=preferredColorScheme=1")
            dark = probed(page, 1280, "--blink-settings=preferredColorScheme=0")
            bright = [np.mean(_channels(str(one["background"]))) for one in (light, dark)]
            follows = bright[0] > 200 > 60 > bright[1]
            _, log = browser(page, 1280)
            outside = requested(log) - own
            for address in sorted(outside):
                print(f"  asked for {address}")
            alone = bool(log) and not outside
            failed += (not follows) + (not alone)
            print(
                f"{page.name:18s} background light {bright[0]:.0f}, dark {bright[1]:.0f}; "
                f"{len(outside)} requests to outside: {'ok' if follows and alone else 'FAILED'}"
            )
    return 1 if failed else 0


def _channels(colour: str) -> list[int]:
    return [int(part) for part in re.findall(r"\d+", colour)[:3]]


if __name__ == "__main__":
    sys.exit(main())
