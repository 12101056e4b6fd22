"""levelbook's half on the desk: the book of tank levels, its figures and its papers.

In a notebook:

    import companion as lb
    site = lb.load_site("site.toml")
    tank = site.tank("north")
    readings, rejects = lb.read_csv("readings.csv")
    lb.convert(tank, readings)                                    # figures, a row a reading
    lb.daily(site, tank, readings, first_day, last_day)           # the log, a row a local day
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HANDED_ON = {
    "load_site": "companion.settings.site",
    "open_book": "companion.book.store",
    "read_csv": "companion.book.readings",
    "convert": "companion.figures.convert",
    "daily": "companion.papers.daily",
    "draw_trend": "companion.papers.trend",
}

__all__ = list(_HANDED_ON)


def __getattr__(name: str) -> Any:
    """The few names that a notebook needs, loaded when asked for."""
    if name in _HANDED_ON:
        return getattr(import_module(_HANDED_ON[name]), name)
    raise AttributeError(f"module 'companion' has no attribute '{name}'; it hands on {', '.join(_HANDED_ON)}")


def __dir__() -> list[str]:
    return sorted({*globals(), *_HANDED_ON})
