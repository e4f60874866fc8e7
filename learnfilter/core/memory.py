"""Give memory that was freed back to the system."""

from __future__ import annotations

import ctypes


def give_back_memory() -> None:
    """Return free pages of the C heap, where the C library can (glibc).

    Sites differ in size, so blocks of many sizes come and go and the heap fills with holes: a training
    of 1.4 GB holds 0.6 GB of live data.  Call it now and then in long loops; it costs milliseconds.
    """
    trim = getattr(ctypes.CDLL(None), "malloc_trim", None)
    if trim is not None:
        trim(0)
