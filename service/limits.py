"""Counts of a request held against the settings of the server."""

from dataclasses import fields

from service.errors import Fault, Limit, LimitExceeded
from service.settings import Settings, variable

UNITS = {spec.name: spec.metadata["unit"] for spec in fields(Settings)}


def check(name: str, asked: int, settings: Settings, pointer: str | None) -> None:
    """Refuse a count above a setting.

    Parameters
    ----------
    name : str
        Of the setting.
    asked : int
        The count.
    settings : Settings
    pointer : str or None
        To what is counted.

    Raises
    ------
    LimitExceeded
    """
    allowed = getattr(settings, name)
    if asked <= allowed:
        return
    detail = f"{asked} {UNITS[name]} are more than the {allowed} allowed here"
    limit = Limit(name=name, allowed=allowed, asked=asked, setting=variable(name))
    raise LimitExceeded(detail, limit=limit, faults=[Fault(detail=detail, code=LimitExceeded.code, pointer=pointer)])
