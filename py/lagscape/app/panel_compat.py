"""Lets Panel and Bokeh start in the browser without what they import and this page never uses, and with style sheets of this site.

Bokeh 3.7 imports pandas only to ask whether a value is a data frame; nothing here ever makes one, so empty classes answer. Panel asks
for pandas unless pyodide-http is there; that would patch network libraries that the page must not use, so a name without function stands
for it. Map tiles, YAML themes and Panel's chat widgets are imported at the start and never used: together they cost about a twentieth
of the start. Panel's components name style sheets of a content network: they are pointed at the site's own copy before anything reads them.
"""

from __future__ import annotations

import functools
import html
import importlib.abc
import importlib.machinery
import sys
from types import ModuleType, SimpleNamespace
from typing import Any

__all__ = ["remember_defaults", "stand_in_for_unused", "use_own_style_sheets"]

RESOURCES = "panel.io.resources"


def stand_in_for_unused() -> None:
    """Puts modules in place of libraries that are only imported: they hold names for isinstance checks and nothing else."""
    if "pandas" in sys.modules:
        return
    frames = {name: type(name, (), {}) for name in ("DataFrame", "Series", "Index", "MultiIndex", "Timestamp", "Timedelta", "Period")}
    _module("pandas", **frames, NaT=None, __version__="0", __path__=[])
    _module("pandas.core", __path__=[])
    _module("pandas.core.groupby", GroupBy=type("GroupBy", (), {}))
    _module("pyodide_http", patch_all=lambda: None)
    _module("yaml", SafeLoader=type("SafeLoader", (), {}), load=_refuse, safe_load=_refuse)
    _module("xyzservices", TileProvider=type("TileProvider", (), {}))
    _module("panel.chat")
    # Panel cleans the name of a custom component, which this program makes itself, with bleach: escaping serves as well.
    _module("bleach", sanitizer=SimpleNamespace(Cleaner=lambda **_: SimpleNamespace(clean=html.escape)))


def remember_defaults() -> None:
    """Has Bokeh look up the overridden defaults of a model class once. Call it after Bokeh is imported.

    Bokeh walks all ancestors of the class for each property of each new model, a tenth of the time in which the page is built; the
    answer never changes, because defaults are overridden in class bodies only.
    """
    from bokeh.core.has_props import HasProps

    look_up = HasProps._overridden_defaults.__func__  # type: ignore[attr-defined]
    HasProps._overridden_defaults = classmethod(functools.cache(look_up))  # type: ignore[method-assign, assignment, arg-type]


def use_own_style_sheets(address: str) -> None:
    """Makes Panel look for its style sheets under `address`, which ends with a slash. Call it before Panel is imported."""
    sys.meta_path.insert(0, _ResourcesFinder(address))


def _refuse(*_: Any, **__: Any) -> None:
    raise NotImplementedError("YAML files are not read in the browser")


def _module(name: str, **members: Any) -> None:
    module = ModuleType(name)
    module.__dict__.update(members)
    sys.modules[name] = module


class _ResourcesFinder(importlib.abc.MetaPathFinder):
    """Finds Panel's resources module as usual, and has its address changed right after it has run."""

    def __init__(self, address: str) -> None:
        self._address = address

    def find_spec(self, fullname: str, path: Any, target: Any = None) -> importlib.machinery.ModuleSpec | None:
        if fullname != RESOURCES:
            return None
        spec = importlib.machinery.PathFinder.find_spec(fullname, path)
        if spec is not None and spec.loader is not None:
            spec.loader = _ResourcesLoader(spec.loader, self._address)
        return spec


class _ResourcesLoader(importlib.abc.Loader):
    def __init__(self, loader: Any, address: str) -> None:
        self._loader, self._address = loader, address

    def create_module(self, spec: importlib.machinery.ModuleSpec) -> ModuleType | None:
        return self._loader.create_module(spec)

    def exec_module(self, module: Any) -> None:
        self._loader.exec_module(module)
        old = module.CDN_DIST
        module.CDN_DIST = self._address
        for table in (module.CSS_URLS, module.JS_URLS):
            for key, url in table.items():
                table[key] = url.replace(old, self._address)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._loader, name)
