"""The fingerprint of a sweep: everything that changes its results, and nothing else.

Two runs with one fingerprint have the same result for the same index. It is kept in its parts as well, so that a
run that does not fit can say which key differs.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from importlib.metadata import version
from typing import Any

import numpy as np

from roa import __version__
from roa.kernel.target import Target

# Keys of the resolved configuration that change what is said of the results, or how many there are, but not them.
WITHOUT = ("title", "verdict", "sweep.samples", "sweep.accuracy", "sweep.goal")
PACKAGES = ("numpy", "scipy", "numba")


def flat(tree: Mapping[str, Any], prefix: str = "") -> dict[str, Any]:
    """Return nested tables as one with dotted keys."""
    parts: dict[str, Any] = {}
    for key, value in tree.items():
        name = f"{prefix}{key}"
        parts.update(flat(value, f"{name}.") if isinstance(value, Mapping) else {name: value})
    return parts


def configuration_parts(resolved: Mapping[str, Any]) -> dict[str, Any]:
    """Return the parts that come from the configuration, flat; `resolved` has defaults filled in."""
    return {
        key: value
        for key, value in flat(resolved, "config.").items()
        if not any(f"{key}.".startswith(f"config.{left_out}.") for left_out in WITHOUT)
    }


def target_parts(target: Target) -> dict[str, Any]:
    """Return the parts that describe the target set, which is derived and not written in the configuration."""
    return {
        "target.kind": target.kind,
        "target.centre": target.centre.tolist(),
        "target.half_widths": target.half_widths.tolist(),
        "target.P": None if target.P is None else target.P.tolist(),
        "target.level": target.level,
        "target.radius": target.radius,
        "target.dwell": target.dwell,
        "target.elsewhere": target.elsewhere.tolist(),
    }


def target_of(parts: Mapping[str, Any]) -> Target:
    """Return the target set that `target_parts` described; what was written as words only is not in it."""
    stored = {key.removeprefix("target."): value for key, value in parts.items() if key.startswith("target.")}
    n = len(stored["centre"])
    arrays = {
        "centre": np.array(stored["centre"]),
        "half_widths": np.array(stored["half_widths"]),
        "P": None if stored["P"] is None else np.array(stored["P"]),
        "elsewhere": np.array(stored["elsewhere"], dtype=np.float64).reshape(-1, n),
    }
    return Target(**(stored | arrays))


def version_parts() -> dict[str, Any]:
    """Return the versions of the packages whose arithmetic shows in the results; imports none of them."""
    return {"version.roa": __version__, **{f"version.{package}": version(package) for package in PACKAGES}}


def digest(parts: Mapping[str, Any]) -> str:
    """Return the fingerprint: SHA-256 of the parts as JSON in one canonical form, hexadecimal."""
    text = json.dumps(parts, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()


def differences(old: Mapping[str, Any], new: Mapping[str, Any]) -> list[str]:
    """Return a sentence for each part that differs, old value -> new value, sorted by key."""
    return [
        f"{key}: {_shown(old, key)} -> {_shown(new, key)}"
        for key in sorted(old.keys() | new.keys())
        if old.get(key) != new.get(key) or (key in old) != (key in new)
    ]


def _shown(parts: Mapping[str, Any], key: str) -> str:
    return json.dumps(parts[key], ensure_ascii=False) if key in parts else "absent"
