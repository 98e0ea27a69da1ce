"""Templates, and what a page may run: its own style and script by their hashes, nothing else."""

from __future__ import annotations

import base64
import hashlib
from functools import cache
from importlib import resources

from jinja2 import Environment, PackageLoader, StrictUndefined

from miner.report import words


@cache
def environment() -> Environment:
    """The templates, with names escaped and the filters of ``words``."""
    made = Environment(
        loader=PackageLoader("miner.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.filters |= words.FILTERS
    made.globals |= {"span": words.span, "some": words.some}
    return made


def asset(name: str) -> str:
    """A style or script of the report, as text."""
    return (resources.files("miner.report") / "templates" / name).read_text(encoding="utf-8")


def policy(style: str, script: str) -> str:
    """The content-security policy of a page with this style and this script."""
    return (
        f"default-src 'none'; script-src '{_hash(script)}'; style-src '{_hash(style)}'; "
        "base-uri 'none'; form-action 'none'"
    )


def _hash(text: str) -> str:
    digest = hashlib.sha256(text.encode("utf-8")).digest()
    return f"sha256-{base64.b64encode(digest).decode('ascii')}"
