"""Name every axis of an array that enters a public function, and hold it to the name."""

from __future__ import annotations

from typing import Any

from learnfilter.core.errors import ShapeError


def check(name: str, array: Any, axes: str, /, **sizes: int) -> dict[str, int]:
    """Bind each axis letter of `axes` to a size of `array` (NumPy or torch).

    Args:
        name: what the array is called in the error.
        array: anything with `.shape`.
        axes: letters separated by spaces, for example `"h y x"`.
        sizes: letters already bound.

    Returns:
        The bound sizes, old and new, ready for the next call.

    Raises:
        ShapeError: wrong rank, or a letter bound to two sizes.
    """
    letters, shape = axes.split(), tuple(array.shape)
    if len(letters) != len(shape) or any(
        sizes.setdefault(letter, size) != size for letter, size in zip(letters, shape, strict=True)
    ):
        raise ShapeError(f"{name}: expected [{axes}] with {sizes}, got {shape}")
    return sizes
