"""Pinlight: calibrator stars for optical and infrared interferometry, ranked by what they cost."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from pinlight.version import __version__

if TYPE_CHECKING:
    from pinlight.arrays.files import Array, load_array
    from pinlight.catalogue.making import make_catalogue
    from pinlight.catalogue.store import Catalogue, open_catalogue
    from pinlight.errors import (
        CatalogueError,
        InputError,
        NotAllowedError,
        NotFoundError,
        PinlightError,
        ServiceError,
        TokenError,
    )
    from pinlight.faces.client import Client
    from pinlight.faces.library import best_set, plan_night, rank
    from pinlight.faces.targets import read_requests
    from pinlight.planning.night import NightPlan, Request
    from pinlight.ranking.result import Ranking
    from pinlight.ranking.target import Target

__all__ = [
    "Array",
    "Catalogue",
    "CatalogueError",
    "Client",
    "InputError",
    "NightPlan",
    "NotAllowedError",
    "NotFoundError",
    "PinlightError",
    "Ranking",
    "Request",
    "ServiceError",
    "Target",
    "TokenError",
    "__version__",
    "best_set",
    "load_array",
    "make_catalogue",
    "open_catalogue",
    "plan_night",
    "rank",
    "read_requests",
]

# Public name -> module, imported when first asked for: the command line starts in a blink.
_HOMES = {
    "Array": "pinlight.arrays.files",
    "Catalogue": "pinlight.catalogue.store",
    "CatalogueError": "pinlight.errors",
    "Client": "pinlight.faces.client",
    "InputError": "pinlight.errors",
    "NightPlan": "pinlight.planning.night",
    "NotAllowedError": "pinlight.errors",
    "NotFoundError": "pinlight.errors",
    "PinlightError": "pinlight.errors",
    "Ranking": "pinlight.ranking.result",
    "Request": "pinlight.planning.night",
    "ServiceError": "pinlight.errors",
    "Target": "pinlight.ranking.target",
    "TokenError": "pinlight.errors",
    "best_set": "pinlight.faces.library",
    "load_array": "pinlight.arrays.files",
    "make_catalogue": "pinlight.catalogue.making",
    "open_catalogue": "pinlight.catalogue.store",
    "plan_night": "pinlight.faces.library",
    "rank": "pinlight.faces.library",
    "read_requests": "pinlight.faces.targets",
}


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'pinlight' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
