"""Arrays from a file, each taken by name, held to its shape, and none left over."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from safetensors import SafetensorError
from safetensors.numpy import load

from learnfilter.core.errors import BundleError


class Arrays:
    """Named arrays of one file.

    Args:
        file: for messages.
        arrays: name -> array.
    """

    def __init__(self, file: Path, arrays: Mapping[str, NDArray[Any]], prefix: str = ""):
        self.file, self._arrays, self._prefix = file, dict(arrays), prefix

    @classmethod
    def parse(cls, file: Path, content: bytes) -> Arrays:
        """The arrays in the bytes of a safetensors file; BundleError where they are none."""
        try:
            return cls(file, load(content))
        except (SafetensorError, KeyError, ValueError) as error:
            raise BundleError(f"unreadable arrays ({error})", file=file) from error

    def take(self, name: str, *shape: int | None, dtype: Any = np.float32) -> NDArray[Any]:
        """Take an array out.

        Where floats are asked for and bytes (int8) are stored, they are multiplied by the array
        `<name>.scale`, which has as many axes, each of their length or of one.

        Args:
            name: of the array.
            shape: size of each axis, None for any.
            dtype: what it is converted to; None leaves it as it is stored.

        Raises:
            BundleError: it is missing, has another shape or another kind of number, or is not finite.
        """
        place = self._prefix + name
        if place not in self._arrays:
            raise BundleError("an array is missing", file=self.file, place=place)
        array = self._arrays.pop(place)
        fits = len(shape) == array.ndim and all(
            want is None or want == size for want, size in zip(shape, array.shape, strict=True)
        )
        if not fits:
            expected = "[" + " ".join("any" if want is None else str(want) for want in shape) + "]"
            raise BundleError(
                "wrong shape", file=self.file, place=place, expected=expected, got=list(array.shape)
            )
        if dtype is not None and not np.can_cast(array.dtype, dtype, "same_kind"):
            raise BundleError(
                "wrong kind of number", file=self.file, place=place, expected=np.dtype(dtype), got=array.dtype
            )
        if not np.isfinite(array).all():
            raise BundleError("not finite", file=self.file, place=place)
        if array.dtype == np.int8 and dtype is not None and np.issubdtype(dtype, np.floating):
            array = array * self._scale(name, array.shape)
        return np.asarray(array, dtype=dtype, order="C")

    def _scale(self, name: str, shape: tuple[int, ...]) -> NDArray[np.float32]:
        scale = self.take(f"{name}.scale", *(None for _ in shape))
        if any(size not in (1, whole) for size, whole in zip(scale.shape, shape, strict=True)):
            raise BundleError(
                "wrong shape", file=self.file, place=f"{self._prefix}{name}.scale",
                expected=f"axes of 1 or of {list(shape)}", got=list(scale.shape),
            )  # fmt: skip
        return scale

    def under(self, prefix: str) -> Arrays:
        """The same arrays, named from `prefix` on; taking there takes here."""
        part = Arrays(self.file, {}, f"{self._prefix}{prefix}.")
        part._arrays = self._arrays
        return part

    def none_left(self) -> None:
        """Raise BundleError where the file holds arrays nobody asked for."""
        if self._arrays:
            raise BundleError("unknown array", file=self.file, place=min(self._arrays))
