"""What encryption and roles cost a query: the same action server with keys and without, asked in turns.

Both are processes of their own with the same policy, both are asked the same queries by the same kind of client, so
that whatever else the machine does meets both alike.
"""

from __future__ import annotations

import tempfile
from itertools import islice
from pathlib import Path
from typing import Any

import numpy as np
import zmq

from nearhand.client.bench_action import (
    REPLY_TIMEOUT_MS,
    TURN,
    WARM_UP,
    action_server,
    ask,
    bench_rig,
    check_replies,
    make_client,
    make_queries,
    welcome_session,
)
from nearhand.service.bus.keys import KeyFolder
from nearhand.service.errors import LinkError

#: CURVE encrypts and authenticates each message both ways; more than this at the median would be a defect of ours.
MOST_MEDIAN_RATIO = 1.5
MOST_ADDED_P99_PERIODS = 0.05


def run(count: int = 4_000) -> dict[str, Any]:
    """Measure; return bench, figures (µs), ratios and targets.

    Args:
        count: how many queries each of both is asked.

    Raises:
        LinkError: a server did not start, or a query was not answered by the armed policy.
    """
    rig = bench_rig()
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    times: dict[str, list[int]] = {"plain": [], "keyed": []}
    replies: list[bytes] = []
    try:
        with tempfile.TemporaryDirectory(prefix="nearhand-") as name:
            folders = {kind: Path(name) / kind for kind in times}
            for folder in folders.values():
                folder.mkdir()
            keys = KeyFolder(folders["keyed"] / "keys")
            key = keys.new("bench", ["drive"], folders["keyed"] / "bench.key")
            with (
                action_server(context, folders["plain"], [rig.name]) as plain,
                action_server(context, folders["keyed"], [rig.name], keys=keys.path) as keyed,
            ):
                sockets = {"plain": make_client(context, plain), "keyed": make_client(context, keyed, key)}
                queries = make_queries(rig, WARM_UP + count)
                for socket in sockets.values():
                    welcome_session(rig, socket)
                while frames := list(islice(queries, TURN)):
                    sockets = dict(reversed(sockets.items()))  # neither is always the one that comes after a pause
                    for kind, socket in sockets.items():
                        for frame in frames:
                            reply, taken_ns = ask(socket, frame)
                            replies.append(reply)
                            times[kind].append(taken_ns)
    except zmq.Again as error:
        raise LinkError(f"no reply within {REPLY_TIMEOUT_MS} ms") from error
    finally:
        context.destroy(linger=0)
    check_replies(replies)
    figures: dict[str, float] = {"queries each": float(count)}
    for kind, values in times.items():
        for label, percent in (("p50", 50.0), ("p99", 99.0)):
            figures[f"{kind} {label} (µs)"] = float(np.percentile(values[WARM_UP:], percent)) / 1e3
    added = {label: figures[f"keyed {label} (µs)"] - figures[f"plain {label} (µs)"] for label in ("p50", "p99")}
    figures |= {f"added by keys {label} (µs)": value for label, value in added.items()}
    ratios = {f"{label} ratio": figures[f"keyed {label} (µs)"] / figures[f"plain {label} (µs)"] for label in added}
    periods = added["p99"] * 1e-6 / rig.timing.period_s
    return {
        "bench": "curve-cost",
        "figures": figures,
        "ratios": ratios,
        "targets": {
            "p50 ratio": {
                "goal": MOST_MEDIAN_RATIO, "value": ratios["p50 ratio"], "met": ratios["p50 ratio"] <= MOST_MEDIAN_RATIO
            },
            "added at p99, control periods of 20 ms": {
                "goal": MOST_ADDED_P99_PERIODS, "value": periods, "met": periods <= MOST_ADDED_P99_PERIODS
            },
        },
    }  # fmt: skip
