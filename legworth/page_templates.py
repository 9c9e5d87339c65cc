"""Templates of pages: every text escaped, and a name that is not given is an error."""

from __future__ import annotations

from jinja2 import Environment, PackageLoader, StrictUndefined

__all__ = ["page_templates"]


def page_templates(package: str) -> Environment:
    """Return the templates in folder ``templates`` of a package; the caller adds filters of its own."""
    return Environment(
        loader=PackageLoader(package, "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
