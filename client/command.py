"""The ``nearhand`` command: finds the verb, runs it, turns every failure into one line and an exit status.

Exit status: 0 done; 1 it failed (the line says why); 2 the command line is wrong; 3 understood and declined (a gate,
a role); 4 the service does not answer; 130 interrupted.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from importlib import import_module
from importlib.metadata import version

from nearhand.service.errors import LinkError, NearhandError, RefusedError

#: The verbs in the order of the job, with what ``--help`` says of each.
VERBS: dict[str, str] = {
    "serve": "run the service: action server, keeper, trainers",
    "tryout": "go through the whole job once, with a simulated rig and injected faults",
    "collect": "stream demonstrations from a simulated rig or import them from a file",
    "inspect": "check the demonstrations of a rig",
    "curate": "keep, exclude, trim, weight and tag demonstrations; save training sets",
    "distil": "train a policy from the demonstrations",
    "measure": "measure a version's distance to the expert",
    "release": "put a measured version in service, through the gate",
    "shadow": "have a version look on without acting, and see how far it is from what is done",
    "rollback": "put an earlier version back in service",
    "rearm": "clear a latched trip, or latch a rig",
    "watch": "see the rigs live",
    "report": "write the evidence for a version as one page",
    "backup": "back the data folder up while the service runs, or put a backup back",
    "keys": "give out keys with roles, list them, put them out of force",
    "bench": "measure this machine against references",
}


def _overview() -> argparse.ArgumentParser:
    verbs = "\n".join(f"  {verb:<10} {text}" for verb, text in VERBS.items())
    parser = argparse.ArgumentParser(
        prog="nearhand",
        usage="nearhand VERB [options]   (nearhand VERB --help tells more)",
        description="Distil a machine's expert driving into a fast controller, and keep it on a short lead.",
        epilog=f"verbs, in the order of the job:\n{verbs}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"nearhand {version('nearhand')}")
    parser.add_argument("verb", nargs="?", metavar="VERB", help="what to do")
    return parser


def exit_status(error: NearhandError) -> int:
    """Return the exit status that stands for an error."""
    if isinstance(error, RefusedError):
        return 3
    return 4 if isinstance(error, LinkError) else 1


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit status."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    overview = _overview()
    if not words or words[0].startswith("-"):
        overview.parse_args(words)
        overview.print_help()
        return 2
    verb = words[0]
    if verb not in VERBS:
        print(f"nearhand: there is no verb {verb!r}; there are: {', '.join(VERBS)}", file=sys.stderr)
        return 2
    module = import_module(f"nearhand.client.commands.{verb}")
    parser = argparse.ArgumentParser(prog=f"nearhand {verb}", description=module.__doc__)
    module.add_arguments(parser)
    options = parser.parse_args(words[1:])
    try:
        return int(module.run(options))
    except NearhandError as error:
        if getattr(options, "json", False):
            print(json.dumps({"error": {"code": error.code, "message": error.message}}))
        print(f"nearhand: {error.message}", file=sys.stderr)
        return exit_status(error)
    except KeyboardInterrupt:
        print("nearhand: interrupted", file=sys.stderr)
        return 130
    except BrokenPipeError:
        return 1


if __name__ == "__main__":
    raise SystemExit(main())
