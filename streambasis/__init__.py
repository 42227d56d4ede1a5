"""streambasis: an orthonormal basis of what a multi-channel feed has shown, kept up to date.

The names below are loaded when first used, so that importing the package costs nothing but this
file. The product is advisory: it is not a protective or safety-instrumented function.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from streambasis._version import __version__

if TYPE_CHECKING:
    from streambasis.basis import StreamBasis
    from streambasis.compare import merge, principal_angles, subspace_distance
    from streambasis.errors import StreambasisError
    from streambasis.fleet import Fleet
    from streambasis.kernels._cache import CacheWarning
    from streambasis.monitor import NoveltyMonitor
    from streambasis.principal import PrincipalBasis
    from streambasis.snapshot import from_bytes, load, save, to_bytes
    from streambasis.warming import warm_up

_HOMES = {
    "CacheWarning": "streambasis.kernels._cache",
    "Fleet": "streambasis.fleet",
    "NoveltyMonitor": "streambasis.monitor",
    "PrincipalBasis": "streambasis.principal",
    "StreamBasis": "streambasis.basis",
    "StreambasisError": "streambasis.errors",
    "from_bytes": "streambasis.snapshot",
    "load": "streambasis.snapshot",
    "merge": "streambasis.compare",
    "principal_angles": "streambasis.compare",
    "save": "streambasis.snapshot",
    "subspace_distance": "streambasis.compare",
    "to_bytes": "streambasis.snapshot",
    "warm_up": "streambasis.warming",
}

__all__ = [
    "CacheWarning",
    "Fleet",
    "NoveltyMonitor",
    "PrincipalBasis",
    "StreamBasis",
    "StreambasisError",
    "__version__",
    "from_bytes",
    "load",
    "merge",
    "principal_angles",
    "save",
    "subspace_distance",
    "to_bytes",
    "warm_up",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        value = getattr(importlib.import_module(_HOMES[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *_HOMES})
