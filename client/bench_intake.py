"""How fast demonstrations become durable, beside a bare transport of the same bytes with an fsynced append.

Throughput: one client records as fast as it can, 32 channels, until the service has acknowledged all of it; the floor
sends chunks of the same bytes from one process to another, which appends each to a file, flushes it to the disk, and
answers. Load: eight rigs of 1 kHz each at their pace, with the time that adding a sample takes the control loop, the
time until samples are acknowledged, and the keeper's memory. Growth: throughput again on what is stored by then.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np
import zmq

from nearhand.client.demos import DemonstrationStream
from nearhand.client.desk import Desk
from nearhand.client.recording import Recording
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.desk_messages import EpisodesReply, ListEpisodes, PutRig, RigReply
from nearhand.service.errors import LinkError
from nearhand.service.rigs import Rig, rig_from_toml

OBSERVATIONS, ACTIONS = 26, 6
CHUNK_SAMPLES = 1000
RIGS, RATE_HZ = 8, 1_000.0
EPISODE_SAMPLES = 20_000
KEEPER = "nearhand.service.keeper.process"
FLUSH_S = 120.0

#: Appends what it gets to a file, flushes it to the disk, and answers with how many bytes that were.
FLOOR = """
import os, sys, zmq
socket = zmq.Context().socket(zmq.PULL)
answers = zmq.Context.instance().socket(zmq.PUSH)
port, back = socket.bind_to_random_port("tcp://127.0.0.1"), answers.bind_to_random_port("tcp://127.0.0.1")
print(port, back, flush=True)
descriptor = os.open(sys.argv[1], os.O_WRONLY | os.O_CREAT | os.O_APPEND)
while True:
    frame = socket.recv()
    os.write(descriptor, frame)
    os.fsync(descriptor)
    answers.send(str(len(frame)).encode())
"""


def run(seconds: float = 20.0, count: int = 200_000) -> dict[str, Any]:
    """Measure; return bench, figures, ratios and targets.

    Args:
        seconds: how long eight rigs record at their pace.
        count: samples of each throughput measurement.

    Raises:
        LinkError: the service or the floor failed, or something was lost.
    """
    with tempfile.TemporaryDirectory(prefix="nearhand-") as name:
        folder = Path(name)
        floor = _floor(folder / "floor", count)
        with ServiceProcess(folder / "data") as service, Desk(service.lanes["desk"]) as desk:
            rigs = [_put(desk, f"rig-{index}") for index in range(RIGS)]
            intake = service.lanes["intake"]
            first = _throughput(rigs[0], intake, folder / "spool", count)
            memory = [_memory_mib(service)]
            loaded = _load(rigs, intake, folder, seconds)
            memory.append(_memory_mib(service))
            again = _throughput(rigs[0], intake, folder / "spool", count)
            begin_s = time.monotonic()
            stored = sum(int(row["samples"]) for rig in rigs for row in _episodes(desk, rig.name))
            query_s = time.monotonic() - begin_s
    recorded = 2 * count + loaded["samples"]
    if stored != recorded:
        raise LinkError(f"{stored} samples are stored of {recorded:.0f} recorded")
    figures = {
        "floor, samples per second": floor, "samples per second": first, "samples per second, later": again,
        "samples stored": float(stored), "listing all episodes (s)": query_s,
        "eight rigs: samples": loaded["samples"], "eight rigs: lost": loaded["lost"],
        "eight rigs: add p50 (µs)": loaded["add_p50_us"], "eight rigs: add p99 (µs)": loaded["add_p99_us"],
        "eight rigs: acknowledged after, p50 (ms)": loaded["ack_p50_ms"],
        "eight rigs: acknowledged after, p99 (ms)": loaded["ack_p99_ms"],
        "keeper (MiB)": memory[0], "keeper after the load (MiB)": memory[1],
    }  # fmt: skip
    targets = {
        "to the floor": (first / floor, 0.5, False),
        "later to first": (again / first, 0.8, False),
        "eight rigs: lost": (loaded["lost"], 0.0, True),
        "eight rigs: add p99 (µs)": (loaded["add_p99_us"], 200.0, True),
        "keeper's growth (MiB)": (memory[1] - memory[0], 32.0, True),
    }
    return {
        "bench": "intake",
        "figures": figures,
        "ratios": {"to the floor": first / floor, "later to first": again / first},
        "targets": {
            name: {"value": value, "goal": goal, "met": value <= goal if low else value >= goal}
            for name, (value, goal, low) in targets.items()
        },
    }


def _put(desk: Desk, name: str) -> Rig:
    """Register a rig of 32 channels."""
    observed = ", ".join(f'{{name = "o{k}", unit = "", low = -5.0, high = 5.0}}' for k in range(OBSERVATIONS))
    acted = ", ".join(f'{{name = "a{k}", unit = "", low = -1.0, high = 1.0, slew_per_s = 9.0}}' for k in range(ACTIONS))
    toml = (
        f'name = "{name}"\ntitle = "32 channels"\nobservations = [{observed}]\nactions = [{acted}]\n'
        "timing = {period_s = 0.001, deadline_s = 0.1, lease_s = 0.1}\n"
    )
    desk.ask(PutRig, RigReply, toml=toml, who="bench", why="intake")
    return rig_from_toml(toml)


def _episodes(desk: Desk, rig: str) -> tuple[Any, ...]:
    return desk.ask(ListEpisodes, EpisodesReply, rig=rig).episodes


def _floor(path: Path, count: int) -> float:
    """Return how many samples a second the bare transport and an fsynced append take."""
    frame = os.urandom(CHUNK_SAMPLES * (8 + 4 * (OBSERVATIONS + ACTIONS)))
    process = subprocess.Popen([sys.executable, "-c", FLOOR, str(path)], stdout=subprocess.PIPE, text=True)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    try:
        assert process.stdout is not None
        port, back = process.stdout.readline().split()
        out, answers = context.socket(zmq.PUSH), context.socket(zmq.PULL)
        out.connect(f"tcp://127.0.0.1:{port}")
        answers.connect(f"tcp://127.0.0.1:{back}")
        chunks = max(1, count // CHUNK_SAMPLES)
        begin_s = time.monotonic()
        for _ in range(chunks):
            out.send(frame)
        for _ in range(chunks):
            if not answers.poll(10_000):
                raise LinkError("the floor does not answer")
            answers.recv()
        return chunks * CHUNK_SAMPLES / (time.monotonic() - begin_s)
    finally:
        process.kill()
        process.wait()
        if process.stdout is not None:
            process.stdout.close()
        context.destroy(linger=0)


def _throughput(rig: Rig, intake: str, spool: Path, count: int) -> float:
    """Return how many samples a second become durable, recorded as fast as it goes."""
    rows = np.random.default_rng(0).standard_normal((1000, OBSERVATIONS)).astype(np.float32)
    action = np.zeros(ACTIONS, dtype=np.float32)
    with DemonstrationStream(rig, intake, spool) as stream:
        begin_s = time.monotonic()
        left = count
        while left > 0:
            recording = stream.open("bench")
            length = min(left, EPISODE_SAMPLES)
            for index in range(length):
                recording.add(index * 1e-3, rows[index % 1000], action)
            recording.close("success", rows[0])
            left -= length
        told = stream.flush(FLUSH_S)
        taken_s = time.monotonic() - begin_s
    if any(delivery.state != "closed" for delivery in told.values()):
        raise LinkError(f"not everything was delivered within {FLUSH_S:g} s")
    return count / taken_s


def _load(rigs: list[Rig], intake: str, folder: Path, seconds: float) -> dict[str, float]:
    """Record on all rigs at 1 kHz each, and watch the acknowledgements come."""
    streams = [DemonstrationStream(rig, intake, folder / f"spool-{rig.name}") for rig in rigs]
    recordings: list[Recording] = [stream.open("bench") for stream in streams]
    row, action = np.zeros(OBSERVATIONS, dtype=np.float32), np.zeros(ACTIONS, dtype=np.float32)
    adding: list[float] = []
    waiting: list[float] = []
    steps = round(seconds * RATE_HZ)
    begin_s = time.monotonic()
    seen = 0
    for step in range(steps):
        time.sleep(max(0.0, begin_s + step / RATE_HZ - time.monotonic()))
        for recording in recordings:
            before_s = time.perf_counter()
            recording.add(step / RATE_HZ, row, action)
            adding.append(time.perf_counter() - before_s)
        if step % 20 == 0:
            acknowledged = next(iter(streams[0].deliveries().values())).acknowledged
            now_s = time.monotonic() - begin_s
            # Samples are added at known times: what has just been acknowledged has waited since then.
            waiting += [now_s - sample / RATE_HZ for sample in range(seen, acknowledged)]
            seen = acknowledged
    for recording in recordings:
        recording.close("success", row)
    kept = 0
    for stream in streams:
        kept += sum(told.acknowledged for told in stream.flush(FLUSH_S).values())
        stream.close()
    waits = np.array(waiting or [float("nan")])
    return {
        "samples": float(steps * len(rigs)),
        "lost": float(steps * len(rigs) - kept),
        "add_p50_us": float(np.percentile(adding, 50)) * 1e6,
        "add_p99_us": float(np.percentile(adding, 99)) * 1e6,
        "ack_p50_ms": float(np.percentile(waits, 50)) * 1e3,
        "ack_p99_ms": float(np.percentile(waits, 99)) * 1e3,
    }


def _memory_mib(service: ServiceProcess) -> float:
    """Return the keeper's resident memory."""
    number = service.process_number(KEEPER)
    pages = int(Path(f"/proc/{number}/statm").read_text(encoding="utf-8").split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 2**20
