"""The operator's verbs against a real service, each as a process of its own, as a person would type them."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nearhand.client.desk import Desk
from nearhand.client.link import RigLink
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus.desk_messages import (
    EpisodeReply,
    EpisodesReply,
    EventsReply,
    GetEpisode,
    GetJob,
    JobReply,
    ListEpisodes,
    ListEvents,
)
from nearhand.service.errors import UnknownNameError
from nearhand.service.rigs import rig_from_file

NEARHAND = [sys.executable, "-m", "nearhand.client.command"]


@pytest.fixture
def short_crane(tmp_path: Path) -> str:
    """The crane with episodes of two seconds, as a TOML file."""
    text = builtin_text("rigs", "crane").replace(
        '[simulator]\nname = "crane"', '[simulator]\nname = "crane"\n\n[simulator.options]\nmax_steps = 100'
    )
    path = tmp_path / "short.toml"
    path.write_text(text, encoding="utf-8")
    return str(path)


def run(service: ServiceProcess, *words: str, status: int = 0) -> dict[str, Any]:
    """Run a verb with ``--json`` and return what it printed; nothing else may stand on standard output."""
    line = [*NEARHAND, *words, "--service", service.lanes["desk"], "--json"]
    answer = subprocess.run(line, capture_output=True, text=True, timeout=120, check=False)
    assert answer.returncode == status, answer.stderr
    assert "Traceback" not in answer.stderr
    found: dict[str, Any] = json.loads(answer.stdout)
    return found


def test_the_job_from_demonstrations_to_rollback(
    service: ServiceProcess, desk: Desk, short_crane: str, tmp_path: Path
) -> None:
    collected = run(service, "collect", "--rig", short_crane, "--episodes", "12", "--who", "ada")
    assert [row["acknowledged"] for row in collected["episodes"]] == [100] * 12
    assert len(run(service, "inspect")["episodes"]) == 12
    recipe = tmp_path / "brief.toml"
    recipe.write_text('method = "clone"\n[clone]\nsteps = 200\n', encoding="utf-8")
    clone = ["distil", "--recipe", str(recipe), "--episodes", "2"]
    versions = [run(service, *clone, "--seed", str(seed))["versions"][0] for seed in (1, 2)]
    for version in versions:
        figures = run(service, "measure", str(version), "--episodes", "6")["figures"]
        assert figures["closed_loop.success"]["n"] == 6
    refused = run(service, "release", str(versions[0]), status=3)
    assert not refused["released"]
    assert any(not bound["met"] for bound in refused["bounds"])
    assert run(service, "release", str(versions[1]), "--override", status=3)["error"]["code"].startswith("refused.")
    for version in versions:
        override = ["--override", "--why", "a test of the verbs", "--who", "ada"]
        assert run(service, "release", str(version), *override)["released"]
    assert run(service, "rearm", "--why", "area clear")["mode"] == "armed"
    shadow = run(service, "shadow", str(versions[0]), "--why", "before it acts")
    assert (shadow["version"], shadow["state"]) == (versions[0], "looking on")
    with RigLink(rig_from_file(Path(short_crane)), service.lanes["action"]) as link:
        while run(service, "shadow")["rows"] < 20:
            for _ in range(30):
                link.exchange(np.array([8, 0, 0, 0, 4, 2], dtype=np.float32))
    ended = run(service, "shadow", "--stop")
    assert ended["state"] == "ended" and "trolley-acceleration" in ended["beside"]["policy"]["figures"]
    back = run(service, "rollback", "--why", "a test", "--who", "ada")
    assert (back["version"], back["previous"]) == (versions[0], versions[1])
    assert run(service, "rearm", "--halt")["mode"] == "latched"
    assert run(service, "watch")["rigs"]["crane"]["mode"] == "latched"
    page = tmp_path / "report.html"
    run(service, "report", str(versions[0]), "-o", str(page))
    assert "travelling crane" in page.read_text(encoding="utf-8")
    assert run(service, "rollback", "--stand-down")["version"] == 0
    done = [(event["what"], event["who"]) for event in desk.ask(ListEvents, EventsReply, limit=500).events]
    assert ("rollback", "ada") in done
    late = ["--expect", str(versions[1]), "--override", "--why", "somebody was faster"]
    conflict = run(service, "release", str(versions[0]), *late, status=1)
    assert conflict["error"]["code"].startswith("conflict.")


def test_interrupting_distil_detaches_and_the_job_can_be_followed_and_cancelled(
    service: ServiceProcess, desk: Desk, short_crane: str
) -> None:
    run(service, "collect", "--rig", short_crane, "--episodes", "6")
    line = [*NEARHAND, "distil", "--service", service.lanes["desk"]]
    following = subprocess.Popen(line, stderr=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    try:
        end_s = time.monotonic() + 60
        while not _is_running(desk):
            assert time.monotonic() < end_s
        following.send_signal(signal.SIGINT)
        _, told = following.communicate(timeout=30)
    finally:
        following.kill()
        following.wait()
    assert following.returncode == 130
    assert "--attach 1" in told
    assert desk.ask(GetJob, JobReply, job=1).state == "running"
    assert run(service, "distil", "--cancel", "1")["state"] == "cancelled"
    assert run(service, "distil", "--attach", "1", status=1)["error"]["code"] == "learn.cancelled"


def _is_running(desk: Desk) -> bool:
    """Tell whether job 1 is there and has begun to report."""
    try:
        return desk.ask(GetJob, JobReply, job=1).fraction > 0
    except UnknownNameError:
        return False


def test_an_episode_written_as_csv_comes_back_the_same(
    service: ServiceProcess, desk: Desk, short_crane: str, tmp_path: Path
) -> None:
    run(service, "collect", "--rig", short_crane, "--episodes", "1")
    rig = rig_from_file(Path(short_crane))
    names = [channel.name for channel in (*rig.observations, *rig.actions)]
    (row,) = desk.ask(ListEpisodes, EpisodesReply, rig="crane").episodes
    first = samples(desk, str(row["episode"]), len(rig.observations))
    times = np.arange(len(first[1])) * rig.timing.period_s
    lines = [",".join(["episode", "t_s", *names])]
    for index, time_s in enumerate(times):
        values = (float(time_s), *map(float, first[0][index]), *map(float, first[1][index]))
        lines.append(",".join(["one", *map(repr, values)]))
    path = tmp_path / "log.csv"
    path.write_text("\n".join(lines), encoding="utf-8")
    run(service, "collect", "--rig", short_crane, "--from", str(path))
    listed = desk.ask(ListEpisodes, EpisodesReply, rig="crane").episodes
    imported = [row for row in listed if row["operator"] == "imported"]
    second = samples(desk, str(imported[0]["episode"]), len(rig.observations))
    # The last row of a file has no action that follows it: it gives the final observation.
    np.testing.assert_array_equal(second[0], first[0][: len(second[0])])
    np.testing.assert_array_equal(second[1], first[1][: len(second[1])])


def samples(desk: Desk, episode: str, observations: int) -> tuple[np.ndarray[Any, Any], np.ndarray[Any, Any]]:
    """Return an episode's observations and actions."""
    found = desk.ask(GetEpisode, EpisodeReply, episode=episode)
    rows = np.frombuffer(found.obs, dtype="<f4").reshape(-1, observations)
    return rows, np.frombuffer(found.act, dtype="<f4").reshape(found.samples, -1)


def test_a_file_with_a_bad_row_imports_nothing(
    service: ServiceProcess, desk: Desk, short_crane: str, tmp_path: Path
) -> None:
    run(service, "collect", "--rig", short_crane, "--episodes", "1")
    rig = rig_from_file(Path(short_crane))
    names = ",".join(channel.name for channel in (*rig.observations, *rig.actions))
    path = tmp_path / "bad.csv"
    path.write_text(f"episode,t_s,{names}\na,0.0,1,0,0,0,4,9,0.1\na,0.02,1,0,oops,0,4,9,0.1\n", encoding="utf-8")
    error = run(service, "collect", "--rig", short_crane, "--from", str(path), status=1)["error"]
    assert "line 3" in error["message"]
    assert "swing-angle" in error["message"]
    assert len(desk.ask(ListEpisodes, EpisodesReply, rig="crane").episodes) == 1
