"""The rigs and recipes that come with Nearhand, one TOML file each."""

from __future__ import annotations

from importlib import resources

from nearhand.service.errors import ConfigError


def builtin_names(folder: str) -> list[str]:
    """Return the names of the files in ``rigs`` or ``recipes``."""
    return sorted(
        item.name.removesuffix(".toml")
        for item in resources.files("nearhand.configs").joinpath(folder).iterdir()
        if item.name.endswith(".toml")
    )


def builtin_text(folder: str, name: str) -> str:
    """Return the TOML text of a rig or recipe that comes with Nearhand.

    Raises:
        ConfigError: there is none of that name.
    """
    if name not in builtin_names(folder):
        raise ConfigError(
            f"no built-in {folder.rstrip('s')} named {name!r}; there are: {', '.join(builtin_names(folder))}"
        )
    return resources.files("nearhand.configs").joinpath(folder, f"{name}.toml").read_text(encoding="utf-8")
