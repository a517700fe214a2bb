"""Many rigs on one action server: throughput beside an echo, and what a flood and a source of rubbish do to the others.

Up to 32 rigs ask at 100 Hz each, from several processes. Then two more clients join: one sends queries as fast as it
can, one sends frames that are no messages. The others' round trips before and during that are compared.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import zmq

from nearhand.client.bench_action import action_server, echo_server
from nearhand.service.errors import LinkError

RATE_HZ, SENDERS = 100.0, 2
#: The flood and the rubbish end by themselves this long after the others.
TIMEOUT_S = 60.0

#: Asks for a share of the rigs at a rate, all in one process; prints round trips in µs as JSON, one list per rig.
SENDER = """
import json, sys, time
import zmq
from nearhand.service.bus.queries import pack_query
from nearhand.service.bus.action_messages import Hello
from nearhand.service.bus.codec import encode
address, rigs = sys.argv[1], json.loads(sys.argv[2])
rate_hz, seconds, raw = float(sys.argv[3]), float(sys.argv[4]), sys.argv[5] == "echo"
context = zmq.Context()
sockets = {}
for rig in rigs:
    socket = context.socket(zmq.DEALER)
    socket.setsockopt(zmq.LINGER, 0)
    socket.connect(address)
    sockets[rig] = socket
    if not raw:
        socket.send(encode(Hello(rig=rig, session="bench", observations=tuple(f"o{k}" for k in range(24)),
                                 actions=tuple(f"a{k}" for k in range(6)), period_s=0.02)))
        assert socket.poll(10000), "no welcome"
        socket.recv()
obs, applied = bytes(96), bytes(24)
period_ns = int(1e9 / rate_hz)
begin_ns = time.monotonic_ns() + 200_000_000
due = {rig: begin_ns + index * period_ns // len(rigs) for index, rig in enumerate(rigs)}
seq = dict.fromkeys(rigs, 0)
times = {rig: [] for rig in rigs}
end_ns = begin_ns + int(seconds * 1e9)
missed = 0
while True:
    rig = min(due, key=due.get)
    if due[rig] >= end_ns:
        break
    early_ns = due[rig] - time.monotonic_ns()
    if early_ns > 0:
        time.sleep(early_ns * 1e-9)
    due[rig] += period_ns
    seq[rig] += 1
    socket = sockets[rig]
    sent_ns = time.monotonic_ns()
    socket.send(pack_query(rig, "bench", seq[rig], sent_ns, obs, applied))
    if not socket.poll(2000):
        missed += 1
        continue
    socket.recv()
    times[rig].append((time.monotonic_ns() - sent_ns) / 1e3)
print(json.dumps({"times": times, "missed": missed}))
"""

#: Sends as fast as it can: queries of a rig of its own, or rubbish. Says so when it has begun.
TROUBLE = """
import os, sys, time
import zmq
from nearhand.service.bus.queries import pack_query
address, rig, seconds = sys.argv[1], sys.argv[2], float(sys.argv[3])
socket = zmq.Context().socket(zmq.DEALER)
socket.setsockopt(zmq.LINGER, 0)
socket.connect(address)
end_s, count = time.monotonic() + seconds, 0
while time.monotonic() < end_s:
    query = pack_query(rig, "flood", count + 1, time.monotonic_ns(), bytes(96), bytes(24))
    frame = os.urandom(200) if rig == "-" else query
    try:
        socket.send(frame, zmq.NOBLOCK)
        count += 1
        while socket.poll(0):
            socket.recv()
    except zmq.Again:
        socket.poll(1, zmq.POLLOUT)
print(count)
"""


def run(count: int = 32, seconds: float = 8.0) -> dict[str, Any]:
    """Measure; return bench, figures (µs), ratios and targets.

    Args:
        count: how many rigs.
        seconds: how long each of the three parts lasts.

    Raises:
        LinkError: a server or a sender failed.
    """
    names = [f"rig-{index}" for index in range(count)]
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    try:
        with (
            tempfile.TemporaryDirectory(prefix="nearhand-") as folder,
            echo_server() as echo,
            action_server(context, Path(folder), [*names, "flooding"]) as address,
        ):
            raw = _ask(echo, names, seconds, kind="echo")
            calm = _ask(address, names, seconds)
            stormy, sent = _ask_in_a_storm(address, names, seconds)
    finally:
        context.destroy(linger=0)
    figures = {
        "rigs": float(count),
        "queries per second": sum(map(len, calm["times"].values())) / seconds,
        "queries per second, echo": sum(map(len, raw["times"].values())) / seconds,
        "unanswered": float(calm["missed"]), "unanswered in the storm": float(stormy["missed"]),
        "frames sent by flood and rubbish": float(sent),
    }  # fmt: skip
    parts = {"echo": raw, "calm": calm, "storm": stormy}
    for name, part in parts.items():
        everyone = np.concatenate([np.array(one) for one in part["times"].values()])
        medians = [float(np.median(one)) for one in part["times"].values()]
        for label, percent in (("p50", 50.0), ("p99", 99.0)):
            figures[f"{name} {label} (µs)"] = float(np.percentile(everyone, percent))
        figures[f"{name}, slowest rig's p50 (µs)"] = max(medians)
    ratios = {
        "p50 to echo": figures["calm p50 (µs)"] / figures["echo p50 (µs)"],
        "throughput to echo": figures["queries per second"] / figures["queries per second, echo"],
        "slowest rig to median rig": figures["calm, slowest rig's p50 (µs)"] / figures["calm p50 (µs)"],
        "storm p50 to calm": figures["storm p50 (µs)"] / figures["calm p50 (µs)"],
    }
    # A round of the server answers one request of each trouble-maker before anybody waits twice.
    allowed = figures["calm p50 (µs)"] * 3
    asked = RATE_HZ * count
    targets = {
        "unanswered": (figures["unanswered"] + figures["unanswered in the storm"], 0.0, True),
        "storm p50 (µs)": (figures["storm p50 (µs)"], allowed, True),
        "queries per second": (figures["queries per second"], 0.98 * asked, False),
    }
    return {
        "bench": "many-rigs",
        "figures": figures,
        "ratios": ratios,
        "targets": {
            name: {"value": value, "goal": goal, "met": value <= goal if low else value >= goal}
            for name, (value, goal, low) in targets.items()
        },
    }


def _ask(address: str, names: Sequence[str], seconds: float, kind: str = "action") -> dict[str, Any]:
    """Let several processes ask for all rigs and return what they measured."""
    shares = [names[index::SENDERS] for index in range(SENDERS)]
    words = [
        [sys.executable, "-c", SENDER, address, json.dumps(share), str(RATE_HZ), str(seconds), kind]
        for share in shares if share
    ]  # fmt: skip
    senders = [subprocess.Popen(line, stdout=subprocess.PIPE, text=True) for line in words]
    whole: dict[str, Any] = {"times": {}, "missed": 0}
    for sender in senders:
        out, _ = sender.communicate(timeout=seconds + TIMEOUT_S)
        if sender.returncode:
            raise LinkError("a process that asks for rigs has failed; its own message stands above")
        told = json.loads(out)
        whole["times"].update(told["times"])
        whole["missed"] += told["missed"]
    return whole


def _ask_in_a_storm(address: str, names: Sequence[str], seconds: float) -> tuple[dict[str, Any], int]:
    """Ask while one client floods and another sends rubbish; return also how many frames these sent."""
    words = [
        [sys.executable, "-c", TROUBLE, address, who, str(seconds + 2.0)] for who in ("flooding", "-")
    ]  # fmt: skip
    troubles = [subprocess.Popen(line, stdout=subprocess.PIPE, text=True) for line in words]
    try:
        told = _ask(address, names, seconds)
        return told, sum(int(trouble.communicate(timeout=TIMEOUT_S)[0]) for trouble in troubles)
    finally:
        for trouble in troubles:
            trouble.kill()
            trouble.wait()
