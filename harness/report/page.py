"""The report as one HTML file that needs nothing else: no script, no font, no picture from outside."""

from __future__ import annotations

import base64
import hashlib
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from harness.report.answers import Answers
from harness.report.figures import draw
from harness.report.tables import printable

FOLDER = Path(__file__).parent


def render_page(answers: Answers) -> str:
    """Return the report as one self-contained HTML page.

    Parameters
    ----------
    answers : Answers

    Returns
    -------
    str
        The same text for the same answers, byte for byte. Everything that comes from outside is escaped,
        and the page's policy lets a browser load or run nothing but its own style sheet.
    """
    css = "\n" + (FOLDER / "page.css").read_text(encoding="utf-8")
    fingerprint = base64.b64encode(hashlib.sha256(css.encode("utf-8")).digest()).decode("ascii")
    policy = f"default-src 'none'; style-src 'sha256-{fingerprint}'; base-uri 'none'; form-action 'none'"
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(FOLDER),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        finalize=_printable_unless_ours,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("page.html").render(
        answers=answers,
        css=Markup(css),
        policy=Markup(policy),
        draw=lambda figure: Markup(draw(figure)),
    )


def _printable_unless_ours(value: Any) -> Any:
    return printable(value) if isinstance(value, str) and not isinstance(value, Markup) else value
