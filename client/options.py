"""Options that several verbs share, and what follows from them."""

from __future__ import annotations

import argparse
import getpass
import json
import os
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from nearhand.client.desk import Desk
from nearhand.configs import builtin_names, builtin_text
from nearhand.service.bus.desk_messages import ListRigs, RigsReply
from nearhand.service.bus.keys import KEY_VARIABLE
from nearhand.service.config import DEFAULT_HOST, DEFAULT_PORTS
from nearhand.service.errors import ConfigError, UnknownNameError
from nearhand.service.rigs import Rig, rig_from_toml, sentence


def add_desk_options(parser: argparse.ArgumentParser) -> None:
    """Declare where the service is and how to print."""
    default = f"tcp://{DEFAULT_HOST}:{DEFAULT_PORTS['desk']}"
    parser.add_argument("--service", default=default, metavar="ADDRESS", help="the desk lane (default: %(default)s)")
    parser.add_argument(
        "--key", metavar="FILE", help=f"a key, where the service has keys (default: the file that {KEY_VARIABLE} names)"
    )
    parser.add_argument("--json", action="store_true", help="print one JSON object and nothing else")


def add_deed_options(parser: argparse.ArgumentParser) -> None:
    """Declare who acts and why, for the event record."""
    parser.add_argument("--who", default=_login(), help="who does this, for the event record (default: %(default)s)")
    parser.add_argument("--why", default="", help="why, for the event record")


def add_rig_option(parser: argparse.ArgumentParser) -> None:
    """Declare which rig is meant."""
    parser.add_argument("--rig", help="the rig's name (default: the only one that the service knows)")


def _login() -> str:
    try:
        return getpass.getuser()
    except (KeyError, OSError):
        return "unnamed"


def open_desk(options: argparse.Namespace) -> Desk:
    """Return a connection to the service that the options name; the caller closes it.

    What ``--key`` names holds for the whole command: for its other connections and for the rig processes it starts.
    """
    if options.key is not None:
        os.environ[KEY_VARIABLE] = options.key
    return Desk(options.service)


def known_rig(desk: Desk, name: str | None) -> str:
    """Return the rig's name, or that of the only rig there is.

    Raises:
        UnknownNameError: there is none, or several to choose from.
    """
    if name is not None:
        return name
    rigs = [str(rig["rig"]) for rig in desk.ask(ListRigs, RigsReply).rigs]
    if len(rigs) == 1:
        return rigs[0]
    what = f"several rigs: {', '.join(rigs)}; choose one with --rig" if rigs else "no rig; collect demonstrations first"
    raise UnknownNameError(f"the service knows {what}", code="unknown.rig")


def rig_text(name_or_path: str) -> tuple[Rig, str]:
    """Return a rig and its TOML text, from a file or from those that come with Nearhand.

    A ``.json`` file holds a resolved description, as the desk gives it out; its text comes back as it is.

    Raises:
        ConfigError: there is no such file or built-in rig, or it is wrong.
    """
    path = Path(name_or_path)
    if path.suffix in (".toml", ".json"):
        try:
            text = path.read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError) as error:
            raise ConfigError(f"cannot read {path}: {error}") from error
        if path.suffix == ".json":
            try:
                return Rig.model_validate_json(text), text
            except ValidationError as error:
                raise ConfigError(f"{path}: {sentence(error)}", code="config.rig") from error
        return rig_from_toml(text, origin=str(path)), text
    if name_or_path not in builtin_names("rigs"):
        raise ConfigError(
            f"{name_or_path!r} is neither a .toml file nor a built-in rig ({', '.join(builtin_names('rigs'))})"
        )
    text = builtin_text("rigs", name_or_path)
    return rig_from_toml(text, origin=name_or_path), text


def print_json(value: dict[str, Any]) -> None:
    """Print one JSON object on one line."""
    print(json.dumps(value, sort_keys=True), flush=True)
