"""One cache rule: a pure value of a frozen object is worked out once and kept with the object."""

from __future__ import annotations

import gc
import weakref
from collections.abc import Callable, Hashable
from functools import wraps
from typing import Any, TypeVar, cast

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]
Codes = npt.NDArray[np.int32]
F = TypeVar("F", bound=Callable[..., Any])
T = TypeVar("T")

FEW_ROWS = 50_000  # up to so many rows a value of their length is kept for every argument


def once(method: F) -> F:
    """Keep the value of a pure method under (method, keys of its arguments).

    Arguments that have a ``key`` attribute (partitions, forms) are known by it; all others must
    be hashable. The store lives in the instance's ``__dict__``, so it is neither compared nor
    shown, and travels with a pickled object.
    """
    name = method.__qualname__

    @wraps(method)
    def looked_up(self: Any, *args: Any, **kwargs: Any) -> Any:
        store: dict[Any, Any] = self.__dict__.setdefault("_once", {})
        key = (name, *_keys(args, kwargs))
        if key not in store:
            store[key] = method(self, *args, **kwargs)
        return store[key]

    return cast(F, looked_up)


def lately(method: F) -> F:
    """As :func:`once`, for a value as long as the table (its first argument has ``n`` rows).

    Beyond ``FEW_ROWS`` only the latest value of all such methods is kept: of a table of a million rows one
    such value is held at a time, and not one for every method and argument. It is let go before the next is
    made.
    """
    name, always = method.__qualname__, once(method)

    @wraps(method)
    def looked_up(self: Any, *args: Any, **kwargs: Any) -> Any:
        if self.n <= FEW_ROWS:
            return always(self, *args, **kwargs)
        store: dict[Any, Any] = self.__dict__.setdefault("_once", {})
        place, key = "latest", (name, *_keys(args, kwargs))
        if store.get(place, (None,))[0] != key:
            if place in store and _lingers(store.pop(place)[1]):
                gc.collect()  # a design and its error models know each other, so only this lets them go
            store[place] = key, method(self, *args, **kwargs)
        return store[place][1]

    return cast(F, looked_up)


def _lingers(value: Any) -> bool:
    """Whether a value would outlive its last use: something that it leads to leads back to it."""
    try:
        watched = weakref.ref(value[0] if isinstance(value, tuple) else value)
    except TypeError:  # a number
        return False
    del value
    return watched() is not None


def _keys(args: tuple[Any, ...], kwargs: dict[str, Any]) -> tuple[Any, ...]:
    return (
        *(getattr(a, "key", a) for a in args),
        *((k, getattr(v, "key", v)) for k, v in sorted(kwargs.items())),
    )


def kept(owner: Any, key: tuple[Hashable, ...], make: Callable[[], T]) -> T:
    """``make()``, once per owner and key, in the same store.

    For values of a frozen object that its own class cannot know: the store lives and dies with the
    object, so nothing is held longer than the rows it was made from.
    """
    store: dict[Any, Any] = owner.__dict__.setdefault("_once", {})
    place = ("kept", *key)
    if place not in store:
        store[place] = make()
    found: T = store[place]
    return found


def frozen(array: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """The same array, marked read-only: shared arrays must not be edited by a reader."""
    array.flags.writeable = False
    return array
