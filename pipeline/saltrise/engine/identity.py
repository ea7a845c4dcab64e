"""What makes a run this run: config, inputs, software and cut; and in what two runs differ."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from importlib.metadata import version
from typing import Any

import rasterio

SHARED = ("config", "inputs", "versions")
"""The parts of an identity that run.json holds too."""

_PACKAGES = (
    "saltrise",
    "numpy",
    "numba",
    "scipy",
    "rasterio",
    "zstandard",
    "pyproj",
    "shapely",
    "dask",
)
_WORDS = {"config": "config", "versions": "version of", "cut": "run"}


def identify(
    config: Mapping[str, Any],
    inputs: list[dict[str, Any]],
    versions: Mapping[str, str],
    cut: Mapping[str, int | str],
) -> dict[str, Any]:
    """Identity of a run.

    Parameters
    ----------
    config : mapping
        The resolved config without `[run]`: workers and scheduler may change on the way.
    inputs : list of dict
        Each input's `file`, size and hash, as run.json holds them.
    versions : mapping
        Software that decides the numbers.
    cut : mapping
        Edge of tile and block [cells], and the hash of this program's code: records of one are no
        use to another.
    """
    return {"config": config, "inputs": inputs, "versions": versions, "cut": cut}


def digest(identity: Mapping[str, Any]) -> str:
    """Short name of an identity, for records."""
    text = json.dumps(identity, sort_keys=True, ensure_ascii=False)
    return hashlib.sha256(text.encode()).hexdigest()[:24]


def differences(old: Mapping[str, Any], new: Mapping[str, Any]) -> list[str]:
    """In words, what differs between two identities; parts that `old` lacks do not count."""
    found = []
    for part, word in _WORDS.items():
        if part in old:
            before, after = _flat(old[part]), _flat(new[part])
            found += [
                f"{word} {key}: was {_show(before, key)}, is {_show(after, key)}"
                for key in dict.fromkeys((*before, *after))
                if before.get(key) != after.get(key)
            ]
    return found + _changed_inputs(old["inputs"], new["inputs"])


def _changed_inputs(old: list[dict[str, Any]], new: list[dict[str, Any]]) -> list[str]:
    before, after = ({entry["file"]: entry for entry in entries} for entries in (old, new))
    found = [f"input {file} is gone" for file in before if file not in after]
    found += [f"input {file} is new" for file in after if file not in before]
    both = [file for file in before if file in after and before[file] != after[file]]
    found += [
        f"input {file} changed (was {before[file]['size_bytes']} bytes, sha256 "
        f"{before[file]['sha256'][:12]}, is {after[file]['size_bytes']} bytes, sha256 "
        f"{after[file]['sha256'][:12]})"
        for file in both
    ]
    if not found and old != new:
        found.append("inputs come in another order")
    return found


def _flat(content: Any, key: str = "") -> dict[str, Any]:
    if not isinstance(content, Mapping):
        return {key: content}
    flat: dict[str, Any] = {}
    for name, value in content.items():
        flat |= _flat(value, f"{key}.{name}" if key else str(name))
    return flat


def _show(flat: Mapping[str, Any], key: str) -> str:
    return repr(flat[key]) if key in flat else "not given"


def versions() -> dict[str, str]:
    """Versions of what computed the numbers."""
    found = {name: version(name) for name in _PACKAGES}
    return found | {"gdal": str(rasterio.__gdal_version__)}
