"""Templates, and what every page shows: the night, its age, how to search, and the caution."""

from __future__ import annotations

from functools import cache
from typing import Any
from urllib.parse import urlencode

from fastapi import Request
from jinja2 import Environment
from starlette.responses import HTMLResponse, Response

from legworth import __version__
from legworth.page_templates import page_templates
from legworth.report import CAUTION, money, price_text
from legworth.service.interface import state_of
from legworth.service.looking import health_of
from legworth.service.pages.files import file_address
from legworth.service.pages.leg_figures import days_text

__all__ = ["address", "age", "html", "instant_text", "sentence"]


def address(path: str, **query: Any) -> str:
    """Address of a page; names stand in the query, where every character of theirs is safe."""
    given = {name.rstrip("_"): value for name, value in query.items() if value not in (None, "")}
    return f"{path}?{urlencode(given)}" if given else path


def age(seconds: float) -> str:
    """Say how old something is, roughly."""
    minutes = max(0, round(seconds / 60))
    if minutes < 120:
        return f"{minutes} min"
    hours = round(minutes / 60)
    return f"{hours} h" if hours < 72 else f"{hours // 24} days"


def instant_text(text: str) -> str:
    """An ISO 8601 instant for people: local date, time and offset."""
    return f"{text[:10]} {text[11:16]}"


def sentence(text: str) -> str:
    """Words as a sentence, with a capital at its beginning and a full stop at its end.

    Examples
    --------
    >>> sentence("later nights"), sentence("Why not?")
    ('Later nights.', 'Why not?')
    """
    return f"{text[:1].upper()}{text[1:]}{'' if text.endswith(('.', '!', '?')) else '.'}"


def html(request: Request, template: str, *, status: int = 200, **model: Any) -> Response:
    """Render a page.

    Parameters
    ----------
    request
        The request that it answers.
    template
        Name of the template.
    status
        HTTP status.
    **model
        What the template shows.
    """
    state = state_of(request)
    health = health_of(state)
    index = model.get("index")
    as_of = health.as_of if index is None else index.night.manifest.as_of
    base = {
        "health": health,
        "night_age": "" if as_of is None else age(state.now() - as_of.timestamp()),
        "caution": CAUTION,
        "version": __version__,
        "path": request.url.path,
        "signs": state.settings.read_needs_token,
        "index": None,
        "trouble": "",
    }
    return HTMLResponse(_templates().get_template(template).render(base | model), status)


@cache
def _templates() -> Environment:
    environment = page_templates("legworth.service.pages")
    environment.filters.update(money=money, price=price_text, instant=instant_text, days=days_text, sentence=sentence)
    environment.globals.update(to=address, file=file_address)
    return environment
