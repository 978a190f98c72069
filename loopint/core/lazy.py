"""Attributes that are computed when they are first asked for."""

from __future__ import annotations

from typing import TYPE_CHECKING, Generic, TypeVar, overload

if TYPE_CHECKING:
    from collections.abc import Callable
    from typing import Any, Self

Value = TypeVar("Value")


class lazy(Generic[Value]):  # noqa: N801 - reads as a decorator
    """`functools.cached_property` without its lock, which costs Python 3.11 a microsecond.

    Two threads may compute the value twice; it must be the same each time.

    Examples
    --------
    >>> class Circle:
    ...     @lazy
    ...     def area(self) -> float:
    ...         return 3.0
    >>> circle = Circle()
    >>> circle.area, vars(circle)
    (3.0, {'area': 3.0})
    """

    def __init__(self, compute: Callable[[Any], Value]) -> None:
        self.compute = compute
        self.name = compute.__name__
        self.__doc__ = compute.__doc__

    @overload
    def __get__(self, instance: None, owner: type) -> Self: ...
    @overload
    def __get__(self, instance: object, owner: type) -> Value: ...
    def __get__(self, instance: object | None, owner: type) -> Self | Value:
        if instance is None:
            return self
        value = self.compute(instance)
        instance.__dict__[self.name] = value
        return value
