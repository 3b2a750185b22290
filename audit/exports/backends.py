"""A filesystem of fsspec comes in, the errors that its calls may end in go out.

fsspec backends pass on the errors of the package they are made of, of which many are no OSError. A
backend names these in its own module, by class or by the module they come from; what is named there
is taken for an error of the store. Anything else is a fault of this program and is not caught.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from types import ModuleType
from typing import Any

import fsspec

_ALWAYS: tuple[type[Exception], ...] = (OSError, EOFError, ValueError, RuntimeError, ImportError)
_FAMILIES = {
    # packages whose base class of all errors the backend does not name itself
    "botocore.exceptions": ("BotoCoreError", "ClientError"),
    "aiohttp": ("ClientError",),
    "google.auth.exceptions": ("GoogleAuthError",),
    "azure.core.exceptions": ("AzureError",),
    "paramiko.ssh_exception": ("SSHException",),
}
_NOT_OF_A_STORE = ("builtins", "typing", "warnings", "dataclasses", "inspect")


def failures(place: Any) -> tuple[type[Exception], ...]:
    """What calls of a filesystem, or opening the one of a URL, may raise when the store fails.

    ``place``: the filesystem, or the URL; None for this machine's own, without fsspec. To be asked
    when an exception has come: only packages that are loaded can have raised one.
    """
    if place is None:
        return (OSError,)
    kinds = set(_ALWAYS)
    if isinstance(place, str):
        kinds.add(TypeError)  # the URL lacks a part, such as the host
    for kind in _classes(place):
        for base in kind.__mro__:
            kinds.update(_named_in(sys.modules.get(base.__module__)))
    for module, names in _FAMILIES.items():
        kinds.update(_errors(getattr(sys.modules.get(module), name, None) for name in names))
    return tuple(kinds)


def named(error: BaseException) -> str:
    """An error in words: the system's own, else its text, with its kind where that is not usual."""
    if isinstance(error, OSError) and error.strerror:
        return error.strerror
    text = " ".join(str(error).split())[:300]
    if isinstance(error, OSError | ValueError | ImportError) and text:
        return text
    return f"{type(error).__name__}: {text}" if text else type(error).__name__


def _classes(place: Any) -> Iterator[type]:
    if not isinstance(place, str):
        yield type(place)
        return
    for part in place.split("::"):
        try:
            yield fsspec.get_filesystem_class(part.partition("://")[0])
        except (ValueError, ImportError):  # an unknown protocol, a package that is not installed
            continue


def _named_in(module: ModuleType | None) -> Iterator[type[Exception]]:
    if module is None or module.__name__ in _NOT_OF_A_STORE:
        return
    for value in list(vars(module).values()):
        if isinstance(value, ModuleType):
            if value.__name__ not in _NOT_OF_A_STORE:
                yield from _errors(vars(value).values())
        else:
            yield from _errors([value])


def _errors(values: Any) -> Iterator[type[Exception]]:
    for value in list(values):
        if isinstance(value, type) and issubclass(value, Exception) and value is not Exception:
            yield value
