"""`polewise explain`: the page of a message, from the installed package."""

from __future__ import annotations

import re
from importlib import resources

import click

from polewise.errors import EXIT_HOLDS
from polewise.results.failures import UnknownName, nearest_names

_PAGES = "polewise.explanations"
_CODE = re.compile(r"[a-z0-9]+(-[a-z0-9]+)*\Z")


def run_explain(code: str | None) -> int:
    """Print the page of a code, or all codes."""
    if code is None:
        click.echo("\n".join(codes()))
        return EXIT_HOLDS
    known = codes()
    if not _CODE.match(code) or code not in known:
        nearest = nearest_names(code, known)
        raise UnknownName(code, f"there is no message with the code `{code}`", nearest, None if nearest else "`polewise explain` lists all codes")
    click.echo(resources.files(_PAGES).joinpath(f"{code}.md").read_text(encoding="utf-8").rstrip())
    return EXIT_HOLDS


def codes() -> list[str]:
    """All codes that have a page."""
    return sorted(page.name.removesuffix(".md") for page in resources.files(_PAGES).iterdir() if page.name.endswith(".md"))
