"""Print profiles by name (shipped, all invented) or from a file."""

from __future__ import annotations

import difflib
import tomllib
from importlib.resources import files
from pathlib import Path

from voxelmat.errors import InputError
from voxelmat.model.profile import PrintProfile

__all__ = ["load_profile", "shipped_profiles"]


def shipped_profiles() -> tuple[str, ...]:
    """Names of the profiles that come with voxelmat, in alphabetical order."""
    folder = files("voxelmat.printing") / "profiles"
    return tuple(sorted(p.name[:-5] for p in folder.iterdir() if p.name.endswith(".toml")))


def load_profile(name_or_path: str | Path) -> PrintProfile:
    """Read a print profile.

    Parameters
    ----------
    name_or_path : str or Path
        A name of `shipped_profiles`, or the path of a ``.toml`` file.

    Raises
    ------
    InputError
        If there is no such profile or file, or if its content is not a profile.

    Examples
    --------
    >>> profile = load_profile("invented-standard")
    >>> profile.pitch_x  # 600 dpi = 25.4/600 mm
    Fraction(127, 3000)
    """
    text = str(name_or_path)
    if text in shipped_profiles():
        source = (files("voxelmat.printing") / "profiles" / f"{text}.toml").read_text("utf-8")
        label = f"{text}.toml"
    else:
        path = Path(name_or_path)
        if path.suffix != ".toml" or not path.is_file():
            near = difflib.get_close_matches(text, shipped_profiles(), n=1)
            hint = f" Did you mean '{near[0]}'?" if near else ""
            raise InputError(
                f"There is no print profile '{text}'; give a .toml file or one of "
                f"{', '.join(shipped_profiles())}.{hint}"
            )
        label = path.name
        try:
            source = path.read_text("utf-8")
        except (OSError, UnicodeDecodeError) as error:
            raise InputError(f"The profile cannot be read: {error}.", file=label) from None
    try:
        data = tomllib.loads(source)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"The profile is not valid TOML: {error}.", file=label) from None
    return PrintProfile.from_dict(data, file=label)
