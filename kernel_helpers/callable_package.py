"""Packages whose name is also that of a public function.

``firstarc.preliminary`` is a step of the way and the function of that step. Python binds a
subpackage to its parent as soon as anything below it is imported, so a function of the same name would
vanish. The package itself is therefore made callable and hands the call on.
"""

from __future__ import annotations

import inspect
import sys
from importlib import import_module
from types import ModuleType
from typing import Any


class CallablePackage(ModuleType):
    """A package that can be called; :func:`make_callable` makes one subclass per package."""

    _home = ""
    _function = ""

    @property
    def _target(self) -> Any:
        return getattr(import_module(self._home), self._function)

    def __call__(self, *args: Any, **kwargs: Any) -> Any:
        return self._target(*args, **kwargs)

    def __reduce_ex__(self, protocol: Any) -> Any:
        return import_module, (self.__name__,)

    @property
    def __signature__(self) -> inspect.Signature:
        return inspect.signature(self._target)


def make_callable(package: str, home: str, function: str) -> None:
    """Let calls of the package ``package`` reach ``function`` of the module ``home``, imported at the first
    call.

    Help and signature of the package are those of the function.
    """
    module = sys.modules[package]
    own_doc = module.__doc__

    def shown_doc(self: CallablePackage) -> str | None:
        try:
            target = self._target
            return f"{target.__name__}{inspect.signature(target)}\n\n{target.__doc__}" if target.__doc__ else own_doc
        except ImportError:
            return own_doc

    body = {"_home": home, "_function": function, "__doc__": property(shown_doc)}
    module.__class__ = type("CallablePackage", (CallablePackage,), body)
