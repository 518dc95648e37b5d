"""A module of the package that is loaded when it is first used."""

from __future__ import annotations

from importlib import import_module
from types import ModuleType
from typing import Any


class Later(ModuleType):
    """Stand in for a module that few calls need, so that importing the package stays quick.

    Examples
    --------
    >>> Later("math").sqrt(4.0)
    2.0
    """

    def __init__(self, name: str) -> None:
        """Remember which module."""
        super().__init__(name)
        del self.__dict__["__doc__"]  # the class says what this is

    def __getattr__(self, name: str) -> Any:
        """Load the module, and return what it has under this name."""
        return getattr(import_module(self.__name__), name)

    def __dir__(self) -> list[str]:
        """Return the names of the module."""
        return dir(import_module(self.__name__))
