"""What decides the bits of a computed figure besides its inputs: libraries and processor."""

from __future__ import annotations

import hashlib
import importlib.metadata
import platform
from functools import cache
from typing import Any

import numpy as np
from numpy.lib import introspect

from meterfix.store.values import canonical_json

_FUNCTIONS = "^(power|exp|log|sqrt|add|subtract|multiply|divide|reciprocal|square|cos|sin)$"
"""NumPy functions that arithmetic rests on."""


@cache
def fingerprint() -> str:
    """Return 16 hexadecimal digits that stand for `describe()`.

    Two processes with the same fingerprint and calculation version give the same bits.
    """
    return hashlib.sha256(canonical_json(describe()).encode()).hexdigest()[:16]


def describe() -> dict[str, Any]:
    """Return what the fingerprint covers.

    Versions of Python, NumPy and CoolProp (read from their metadata, without importing
    CoolProp), the C library, the machine, the processor features that NumPy found, and the
    variant of each basic function that NumPy chose for float64 on this processor.
    """
    return {
        "python": platform.python_version(),
        "implementation": platform.python_implementation(),
        "numpy": np.__version__,
        "coolprop": importlib.metadata.version("CoolProp"),
        "c_library": " ".join(platform.libc_ver()),
        "machine": platform.machine(),
        "system": platform.system(),
        "cpu_features": _features(),
        "dispatched": _dispatched(),
    }


def _features() -> list[str]:
    extensions = np.show_config(mode="dicts")["SIMD Extensions"]
    return sorted({*extensions.get("baseline", ()), *extensions.get("found", ())})


def _dispatched() -> dict[str, str]:
    """Return function -> variant in use for float64."""
    chosen: dict[str, str] = {}
    for function, signatures in introspect.opt_func_info(func_name=_FUNCTIONS).items():
        for signature, targets in signatures.items():
            if set(signature) == {"d"}:
                chosen[function] = str(targets["current"])
    return chosen
