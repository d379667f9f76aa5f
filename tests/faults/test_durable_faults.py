"""Whatever is killed, and when: what was acknowledged of a durable layer is there afterwards."""

from __future__ import annotations

import contextlib
import os
import random
import signal
import subprocess
import time
from pathlib import Path
from typing import Any

import pytest
from tests.daemon import daemon_harness
from tests.daemon.daemon_harness import Daemon, Peer, eventually, outcome_of

from byway import frames, messages, obstacles
from bywayd.crew.keep_store import KeepStore, recall_begin

LAYER = "stacks"

#: How often a daemon is killed in one test.
LIVES = int(os.environ.get("BYWAY_FAULT_LIVES", "5"))


@pytest.fixture
def file(tmp_path, monkeypatch):
    """The file of the daemons that are started from now on."""
    found = tmp_path / "keep" / "site.sqlite"
    found.parent.mkdir()
    keep_in(found, monkeypatch)
    return found


def keep_in(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    told = f'[keep]\nfile = "{file}"\n[layers.{LAYER}]\ndurable = true\n'
    monkeypatch.setattr(daemon_harness, "SETTINGS", daemon_harness.SETTINGS + told)


@pytest.fixture
def started(tmp_path, file):
    """Start daemons, all in one folder; all are ended."""
    daemons = []

    def starting(**options):
        daemons.append(Daemon(tmp_path / "one", **options))
        return daemons[-1]

    yield starting
    for daemon in daemons:
        daemon.end()


@pytest.fixture
def meet():
    """Talk to daemons that are ready; all conversations are ended."""
    peers = []

    def meeting(daemon, within_s=20.0):
        peers.append(Peer(daemon))
        peers[-1].when_ready(within_s)
        return peers[-1]

    yield meeting
    for peer in peers:
        peer.close()


def put(peer: Peer, obstacle_id: str, x_m: float, layer: str = LAYER) -> int:
    disc = {obstacle_id: (x_m, 0.0, 0.5)}
    fields, packed = obstacles.pack_shapes(obstacles.shapes({}, disc))
    return peer.change(messages.Put(layer=layer, **fields), packed)


def heard(peer: Peer, wait_ms: int = 0) -> int:
    """The highest number that has been acknowledged, of what can be heard now."""
    sock, highest = peer._socket("updates"), 0
    while sock.poll(wait_ms):
        message = frames.decode(sock.recv_multipart(), frames.REPLIES).message
        if isinstance(message, messages.Acknowledged):
            highest = max(highest, message.number)
        wait_ms = 0
    return highest


def kept(file: Path) -> dict[str, float]:
    """Where the discs of the layer are, as the next daemon will have them."""
    store = KeepStore.open(file, time.time())
    found: dict[str, float] = {}
    place = recall_begin
    while place is not None:
        changes, place = store.recall(place, time.time(), 1000, 1 << 24)
        for change in changes:
            if change["what"] == "put":
                message = messages.Put(layer=change["layer"], **change["message"])
                for each, disc in obstacles.unpack_shapes(message, change["packed"]).discs.items():
                    found[each] = disc[0]
    store.close()
    return found


def kill_all(daemon: Daemon, rng: random.Random) -> None:
    """Kill every process of a daemon, in any order."""
    family = list(daemon.family().values())
    rng.shuffle(family)
    for pid in family:
        with contextlib.suppress(ProcessLookupError):
            os.kill(pid, signal.SIGKILL)
    daemon.process.wait()
    eventually(lambda: not any(_lives(pid) for pid in family))


def _lives(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0] != "Z"
    except OSError:
        return False


@pytest.mark.parametrize("seed", range(2))
def test_all_that_was_acknowledged_is_there_after_every_process_was_killed(
    started, meet, file, seed
):
    rng = random.Random(seed)
    #: What the puts made so far amount to, and how many there were: place k is that of put k.
    ids: list[str] = []
    for _ in range(LIVES):
        daemon = started()
        peer = meet(daemon)
        before = len(ids)
        known = peer.ask(messages.Health()).layers[LAYER]
        assert known.obstacles == len(kept_of(ids, before))
        acknowledged, end_s = 0, time.monotonic() + rng.uniform(0.1, 0.5)
        while time.monotonic() < end_s:
            while len(ids) - before - acknowledged < 32:
                ids.append(f"o{rng.randrange(40)}")
                put(peer, ids[-1], float(len(ids)))
            acknowledged = max(acknowledged, heard(peer, wait_ms=5))
        kill_all(daemon, rng)
        # Whatever had been said before it died counts.
        acknowledged = max(acknowledged, heard(peer, wait_ms=50))
        assert acknowledged > 10
        found = kept(file)
        count = round(max(found.values()))
        assert before + acknowledged <= count <= len(ids)
        assert found == kept_of(ids, count)
        del ids[count:]  # what was not acknowledged may be there or not
    daemon = started()
    assert meet(daemon).ask(messages.Health()).layers[LAYER].obstacles == len(kept_of(ids, count))
    assert daemon.stop() == 0


def kept_of(ids: list[str], count: int) -> dict[str, float]:
    """What the first puts amount to."""
    return {obstacle_id: float(k + 1) for k, obstacle_id in enumerate(ids[:count])}


def test_a_route_leads_round_what_was_acknowledged_in_an_earlier_life(started, meet):
    options = {"skills": "bywayd.crew.trade", "workers": 1}
    first = started(**options)
    peer = meet(first, within_s=200.0)
    kiln = {"kiln": [(8.0, -6.0), (10.0, -6.0), (10.0, 6.0), (8.0, 6.0)]}
    fields, packed = obstacles.pack_shapes(obstacles.shapes(kiln, {"bin": (30.0, 30.0, 1.0)}))
    peer.decided(peer.change(messages.Put(layer=LAYER, **fields), packed))
    peer.decided(peer.change(messages.Drop(layer=LAYER, ids=["bin"])))
    peer.decided(put(peer, "live", 20.0, layer="moving"))
    kill_all(first, random.Random(1))
    second = started(**options)
    peer = meet(second)
    site = peer.ask(messages.Site())
    assert isinstance(site, messages.SiteIs)
    assert {each.layer: (each.polygons, each.discs) for each in site.layers} == {LAYER: (1, 0)}
    answer = peer.answer_to(
        peer.send(
            messages.Replan(
                vehicle="tug",
                unit="tug-1",
                start=(0.0, 0.0, 0.0),
                goal=(18.0, 0.0, 0.0),
                budget_s=0.5,
            )
        )
    )
    assert outcome_of(answer)["cost"] > 19.0


def test_a_clerk_that_is_killed_costs_no_acknowledged_change_and_nobody_their_life(
    started, meet, file
):
    daemon = started()
    peer = meet(daemon)
    before = daemon.family()
    for k in range(6):
        number = put(peer, f"o{k}", float(k))
        clerk = clerk_of(daemon)
        os.kill(clerk, signal.SIGKILL)
        peer.decided(number)
        assert kept_after(daemon, file, f"o{k}") == k
    after = daemon.family()
    same = [name for name in before if "clerk" not in name]
    assert {name: after[name] for name in same} == {name: before[name] for name in same}
    counts = peer.ask(messages.Health()).counts
    assert counts["clerks_lost_total"] == 6


def clerk_of(daemon: Daemon) -> int:
    """Its process; a new one takes its name a moment after it was started."""
    return eventually(
        lambda: next((pid for name, pid in daemon.family().items() if "clerk" in name), None)
    )


def kept_after(daemon: Daemon, file: Path, obstacle_id: str) -> float | None:
    """What a copy of the file has, as a crash of the machine at this moment would leave it."""
    copy = file.parent / "copy"
    copy.mkdir(exist_ok=True)
    for each in file.parent.glob("site.sqlite*"):
        (copy / each.name).write_bytes(each.read_bytes())
    return kept(copy / file.name).get(obstacle_id)


def test_the_clerk_dies_with_its_front_and_the_next_one_has_the_file(started, meet):
    first = started()
    peer = meet(first)
    peer.decided(put(peer, "a", 1.0))
    clerk = clerk_of(first)
    first.process.kill()
    first.process.wait()
    second = started()  # at once: the file may still be locked
    assert meet(second).ask(messages.Health()).layers[LAYER].obstacles == 1
    assert not _lives(clerk)


def test_a_clerk_that_stands_still_holds_up_durable_layers_only(started, meet):
    daemon = started()
    durable, live = meet(daemon), meet(daemon)
    live.decided(rename(live, "other").change(messages.Claim(layer="moving")))
    clerk = clerk_of(daemon)
    os.kill(clerk, signal.SIGSTOP)
    number = put(durable, "a", 1.0)
    for k in range(20):
        live.decided(put(live, "x", float(k), layer="moving"), within_s=2.0)
    assert heard(durable, wait_ms=20) == 0
    os.kill(clerk, signal.SIGCONT)
    assert isinstance(durable.decided(number), messages.Acknowledged)


def rename(peer: Peer, name: str) -> Peer:
    """Give a peer another name as a source."""

    def change(message: messages.Change, packed: bytes = b"") -> int:
        peer._number += 1
        header = frames.Header(message.kind, source=name, number=peer._number, epoch=peer.epoch)
        peer._socket("updates").send_multipart(frames.encode(header, message, packed))
        return peer._number

    peer.change = change  # type: ignore[method-assign]
    return peer


# -- files that cannot be used -------------------------------------------------------------------


def test_a_daemon_does_not_start_without_its_durable_layers(started, file):
    file.write_text("something else\n" * 500)
    daemon = started()
    assert daemon.process.wait(10) == 1
    (line,) = daemon.log_lines("keep.unfit")
    assert "is not a database" in line["why"]
    assert str(file) in line["why"]


def test_a_second_daemon_cannot_have_the_same_file(started, meet, tmp_path):
    meet(started())
    second = Daemon(tmp_path / "two")
    try:
        assert second.process.wait(15) == 1
        assert "in use" in second.log_lines("keep.unfit")[0]["why"]
    finally:
        second.end()


@pytest.fixture
def small_disk(tmp_path):
    """A disk of 200 kB, if we may make one."""
    folder = tmp_path / "disk"
    folder.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", "size=200k", "byway-test", str(folder)]
    try:
        subprocess.run(command, check=True, capture_output=True)
    except (OSError, subprocess.CalledProcessError):
        pytest.skip("no right to mount a disk")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def test_on_a_full_disk_durable_changes_wait_and_live_ones_do_not(
    tmp_path, meet, small_disk, monkeypatch
):
    keep_in(small_disk / "site.sqlite", monkeypatch)
    daemon = Daemon(tmp_path / "one")
    try:
        durable, live = meet(daemon), meet(daemon)
        durable.decided(put(durable, "first", 1.0))
        ballast = small_disk / "ballast"
        with pytest.raises(OSError, match="No space"):
            ballast.write_bytes(bytes(300_000))
        many: dict[str, Any] = {f"o{i}": (1.0, 1.0, 0.5) for i in range(100)}
        fields, packed = obstacles.pack_shapes(obstacles.shapes({}, many))
        number = durable.change(messages.Put(layer=LAYER, **fields), packed)
        eventually(lambda: daemon.log_lines("keep.hindered"))
        assert "no room" in daemon.log_lines("keep.hindered")[0]["why"]
        rename(live, "other")
        live.decided(put(live, "x", 1.0, layer="moving"), within_s=2.0)
        assert heard(durable) == 0
        counts = live.ask(messages.Health()).counts
        assert (counts["clerk_hindered"], counts["keep_pending"]) == (1, 1)
        ballast.unlink()
        assert isinstance(durable.decided(number), messages.Acknowledged)
        eventually(lambda: daemon.log_lines("keep.goes_on"))
    finally:
        daemon.end()
