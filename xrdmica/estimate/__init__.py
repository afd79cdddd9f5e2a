"""Folder and function share a name: ``xrdmica.estimate(...)`` must work also once the folder has been imported."""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import Any


class _Callable(ModuleType):
    def __call__(self, *arguments: Any, **options: Any) -> Any:
        return import_module("xrdmica.estimate.proportions").estimate(*arguments, **options)


sys.modules[__name__].__class__ = _Callable
