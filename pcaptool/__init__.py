"""pcaptool: audit captures of radio frames in UDP datagrams against declarative profiles.

>>> import pcaptool
>>> audit = pcaptool.audit("site/*.pcap", profile="merrowdale")    # doctest: +SKIP
>>> audit.links, audit.frames                                      # doctest: +SKIP
>>> audit.write("out")                                             # doctest: +SKIP

The names below are imported when first used, so that ``import pcaptool`` costs nothing.
"""

import sys
from importlib import import_module
from types import ModuleType
from typing import TYPE_CHECKING

__version__ = "0.1.0"

_WHERE = {
    "Audit": "pcaptool.report",
    "CaptureError": "pcaptool.problem",
    "Options": "pcaptool.audit",
    "PcaptoolError": "pcaptool.problem",
    "Problem": "pcaptool.problem",
    "Profile": "pcaptool.profile",
    "ProfileError": "pcaptool.problem",
    "UsageError": "pcaptool.problem",
    "audit": "pcaptool.report",
    "load_profile": "pcaptool.profile",
    "read_datagrams": "pcaptool.capture",
    "shipped_profiles": "pcaptool.profile",
    "simulate": "pcaptool.simulate",
}
__all__ = [
    "Audit", "CaptureError", "Options", "PcaptoolError", "Problem", "Profile", "ProfileError", "UsageError",
    "__version__", "audit", "load_profile", "read_datagrams", "shipped_profiles", "simulate",
]

if TYPE_CHECKING:
    from pcaptool.audit import Options
    from pcaptool.capture import read_datagrams
    from pcaptool.problem import CaptureError, PcaptoolError, Problem, ProfileError, UsageError
    from pcaptool.profile import Profile, load_profile, shipped_profiles
    from pcaptool.report import Audit, audit
    from pcaptool.simulate import simulate


def __getattr__(name: str) -> object:
    if name in ("audit", "simulate"):
        return import_module(f"pcaptool.{name}")
    if name in _WHERE:
        return getattr(import_module(_WHERE[name]), name)
    raise AttributeError(f"module 'pcaptool' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)


class _Callable(ModuleType):
    """A folder of the package whose name is also a function of the API: ``audit``, ``simulate``."""

    def __call__(self, *args: object, **options: object) -> object:
        name = self.__name__.rpartition(".")[2]
        return getattr(import_module(_WHERE[name]), name)(*args, **options)


class _Package(ModuleType):
    """The package itself; makes such folders callable when they are imported."""

    def __setattr__(self, name: str, value: object) -> None:
        if name in _WHERE and isinstance(value, ModuleType):
            value.__class__ = _Callable
        super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Package
