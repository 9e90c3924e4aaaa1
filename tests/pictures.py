"""Take the pictures of the README from a report made now: ``python -m tests.pictures``.

Needs chromium. The report is one long page, so each picture shows one of its sections alone.
"""

import subprocess
import tempfile
from pathlib import Path

import porter
from porter.job import build_job, portable
from porter.resources import resource

FOLDER = Path(__file__).parents[1] / ".ci" / "pictures"
SPEC = "specs/map_lamp.yaml"
WIDTH = 1000
#: Picture, section of the report, what of it is left out, height in pixels.
PICTURES = (
    ("verdict", "verdict", "#verdict > :is(h3, ul)", 430),
    ("windows", "windows", "section > :not(h2, figure)", 790),
    ("memory", "memory", "section > :not(h2, figure), figure ~ figure", 640),
)
BROWSER = (
    "chromium",
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--hide-scrollbars",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--force-color-profile=srgb",
)


def _alone(html: str, section: str, hidden: str) -> str:
    """The report with one section left in sight."""
    rules = f"header, nav, .skip, section:not(#{section}) {{ display: none }}"
    if hidden:
        rules += f" {hidden} {{ display: none }}"
    return html.replace("</style>", f"{rules}\n</style>", 1)


def main() -> None:
    """Write every picture."""
    html = build_job(portable(porter.read(str(resource(SPEC))))).files["report.html"]
    FOLDER.mkdir(exist_ok=True)
    for name, section, hidden, height in PICTURES:
        with tempfile.TemporaryDirectory() as folder:
            page = Path(folder) / "page.html"
            page.write_text(_alone(html, section, hidden), encoding="utf-8")
            shot = f"--screenshot={FOLDER / f'{name}.png'}"
            size, own = f"--window-size={WIDTH},{height}", f"--user-data-dir={folder}/browser"
            subprocess.run(
                [*BROWSER, shot, size, own, page.as_uri()], check=True, capture_output=True, timeout=120
            )


if __name__ == "__main__":
    main()
