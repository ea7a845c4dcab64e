"""Class schemes from files: those that ship with the package and a user's own."""

from __future__ import annotations

from difflib import get_close_matches
from importlib import resources
from pathlib import Path

from saltrise.errors import InputError
from saltrise.schemes import Scheme, parse_scheme


def shipped_schemes() -> tuple[str, ...]:
    """Names of the class schemes inside the package, sorted."""
    folder = resources.files("saltrise") / "data" / "schemes"
    return tuple(
        sorted(f.name.removesuffix(".toml") for f in folder.iterdir() if f.name.endswith(".toml"))
    )


def load_scheme(name_or_path: str, base: Path) -> Scheme:
    """Load a class scheme by its shipped name or from a TOML file.

    Parameters
    ----------
    name_or_path : str
        A name of `shipped_schemes()`, or a path (relative to `base`) ending in `.toml`.
    base : Path
        Folder of the config.

    Raises
    ------
    InputError
        No such scheme or file, or a faulty scheme.
    """
    names = shipped_schemes()
    if name_or_path in names:
        file = resources.files("saltrise") / "data" / "schemes" / f"{name_or_path}.toml"
        return parse_scheme(file.read_text("utf-8"), name_or_path, f"{name_or_path}.toml")
    if not name_or_path.endswith(".toml"):
        close = get_close_matches(name_or_path, names, n=1)
        hint = f"; did you mean {close[0]!r}?" if close else ""
        raise InputError(
            f"no class scheme {name_or_path!r}; shipped: {', '.join(names)}, or give the path of a "
            f".toml file of your own{hint}"
        )
    path = base / name_or_path
    try:
        text = path.read_text("utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: class scheme cannot be read: {error}") from error
    return parse_scheme(text, path.stem, str(path))
