"""
The two containers of deploy/compose.yaml, as near as can be come to them without an engine.

Their commands, settings and keys, as processes over TCP; where this machine allows it, each in a
network of its own, with a cable between the two, and with every file system read-only except what
is writable in its container. Where it does not, side by side on loopback.
"""

import json
import os
import re
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import yaml

from byway_planning.kernel_cache import cache_root

ROOT = Path(__file__).resolve().parents[2]
SERVICES: dict[str, Any] = yaml.safe_load((ROOT / "deploy" / "compose.yaml").read_text())[
    "services"
]
PORTS = (7461, 7462, 7463)
READY_S_MAX = 200.0

#: Makes everything read-only but the folders that are told, then becomes a command.
SHUT_IN = """
set -eu
mount --make-rprivate /
count=$1; shift
kept=""
while [ "$count" -gt 0 ]; do
    mount --bind "$1" "$1"; kept="$kept $1 "; shift; count=$((count - 1))
done
awk '{print $5}' /proc/self/mountinfo | while read -r place; do
    case "$kept" in *" $place "*) continue ;; esac
    case "$place" in /proc*|/sys*|/dev*) ;; *) mount -o remount,bind,ro "$place" ;; esac
done
exec "$@"
"""


def can_be_shut_in() -> bool:
    command = ["unshare", "-mn", "sh", "-c", SHUT_IN + "\n", "sh", "0"]
    probe = (
        "ip link add name probe0 type veth peer name probe1 && ! touch /tmp/byway-probe 2>/dev/null"
    )
    try:
        tried = subprocess.run([*command, "sh", "-c", probe], capture_output=True, check=False)
    except FileNotFoundError:
        return False
    return tried.returncode == 0


class Containers:
    """A place for each service's files, and, where that can be, a network of its own."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.is_shut_in = can_be_shut_in()
        self.address = "10.77.0.1" if self.is_shut_in else "127.0.0.1"
        self.ports = {port: port if self.is_shut_in else free_port() for port in PORTS}
        self._holders: dict[str, subprocess.Popen[bytes]] = {}
        for name in ("daemon-keys", "yard-keys", "cache", "out", "tmp"):
            (folder / name).mkdir(mode=0o700)
        if self.is_shut_in:
            self._lay_cable()

    def _lay_cable(self) -> None:
        for name in ("daemon", "yard"):
            self._holders[name] = subprocess.Popen(
                ["unshare", "-n", "sh", "-c", "ip link set lo up; echo; exec sleep 1000"],
                stdout=subprocess.PIPE,
            )
            out = self._holders[name].stdout
            assert out is not None
            out.readline()
        daemon, yard = (str(self._holders[name].pid) for name in ("daemon", "yard"))
        link = [
            *["ip", "link", "add", "eth0", "type", "veth", "peer", "name", "eth0", "netns"],
            yard,
        ]
        for pid, commands in (
            (daemon, [link, ["ip", "addr", "add", "10.77.0.1/24", "dev", "eth0"]]),
            (yard, [["ip", "addr", "add", "10.77.0.2/24", "dev", "eth0"]]),
            (daemon, [["ip", "link", "set", "eth0", "up"]]),
            (yard, [["ip", "link", "set", "eth0", "up"]]),
        ):
            for command in commands:
                subprocess.run(["nsenter", "-n", "-t", pid, *command], check=True)

    def here(self, text: str, name: str) -> str:
        """Return what a text of the container means on this machine."""
        for there, folder in (
            ("/etc/byway/keys", "daemon-keys"),
            ("/etc/byway/client-keys", "yard-keys"),
            ("/var/cache/byway", "tmp" if name == "yard" else "cache"),
            ("/var/lib/byway", "out"),
        ):
            text = text.replace(there, str(self.folder / folder))
        text = text.replace("tcp://daemon:", f"tcp://{self.address}:").replace("$$", "$")
        for port, ours in self.ports.items():
            text = re.sub(rf"\b{port}\b", str(ours), text)
        return text

    def environment(self, name: str) -> dict[str, str]:
        root = cache_root()
        assert root is not None
        told = {key: text for key, text in os.environ.items() if not key.startswith("BYWAY_")}
        told |= {
            "PATH": f"{Path(sys.executable).parent}:{os.environ['PATH']}",
            "PYTHONDONTWRITEBYTECODE": "1",
            "BYWAY_CACHE_DIR": self.here("/var/cache/byway", name),
            # What the image would bring along. (That it is for another CPU there would take two
            # minutes more.)
            "BYWAY_WARM_DIR": str(root.parent),
            "MPLCONFIGDIR": self.here("/var/cache/byway/matplotlib", name),
            "BYWAY_LOG__FORM": "json",
        }
        for key, text in SERVICES[name].get("environment", {}).items():
            told[key] = self.here(text, name)
        return told

    def writable(self, name: str) -> list[str]:
        service = SERVICES[name]
        volumes = [each for each in service.get("volumes", ()) if not each.endswith(":ro")]
        places = [each.split(":")[1] for each in volumes]
        places += [each.split(":")[0] for each in service.get("tmpfs", ())]
        return [self.here(place, name) for place in places]

    def start(self, name: str, command: list[str], **more: Any) -> subprocess.Popen[str]:
        """Run a command in the container of a service."""
        shut_in: list[str] = []
        if self.is_shut_in:
            holder = self._holders.get(name)
            if holder is not None:
                shut_in = ["nsenter", "-n", "-t", str(holder.pid)]
            places = self.writable(name)
            shut_in += ["unshare", "-m", "sh", "-c", SHUT_IN, "sh", str(len(places)), *places]
        return subprocess.Popen(
            [*shut_in, *command], env=self.environment(name), cwd="/", text=True, **more
        )

    def run(self, name: str, *command: str) -> subprocess.CompletedProcess[str]:
        """Run a command in the container of a service and wait for its end."""
        pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE}
        with self.start(name, list(command), **pipes) as process:
            out, err = process.communicate(timeout=READY_S_MAX)
        return subprocess.CompletedProcess(command, process.returncode, out, err)

    def close(self) -> None:
        for holder in self._holders.values():
            holder.kill()
            holder.wait()
            assert holder.stdout is not None
            holder.stdout.close()


def free_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as found:
        port: int = found.getsockname()[1]
    return port


@pytest.fixture(scope="module")
def containers(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Containers]:
    warm = [sys.executable, "-m", "bywayd", "warm", "--json"]
    subprocess.run(warm, check=True, capture_output=True, timeout=READY_S_MAX)
    made = Containers(tmp_path_factory.mktemp("containers"))
    yield made
    made.close()


@pytest.fixture(scope="module")
def daemon(containers: Containers) -> Iterator[subprocess.Popen[str]]:
    (script,) = SERVICES["keys"]["command"]
    assert SERVICES["keys"]["entrypoint"] == ["sh", "-euc"]
    for _ in range(2):  # the second time there is nothing left to be done
        made = containers.run("keys", "sh", "-euc", containers.here(script, "keys"))
        assert made.returncode == 0, made.stderr
    with (containers.folder / "log").open("w") as log:
        command = ["byway", *SERVICES["daemon"]["command"]]
        process = containers.start("daemon", command, stdout=log, stderr=log)
    try:
        end_s = time.monotonic() + READY_S_MAX
        while containers.run("daemon", *SERVICES["daemon"]["healthcheck"]["test"][1:]).returncode:
            assert process.poll() is None, (containers.folder / "log").read_text()
            assert time.monotonic() < end_s
        yield process
    finally:
        process.send_signal(signal.SIGTERM)
        status = process.wait(10)
    assert status == 0, (containers.folder / "log").read_text()


def log_of(containers: Containers) -> list[dict[str, Any]]:
    lines = (containers.folder / "log").read_text().splitlines()
    return [json.loads(line) for line in lines if line.startswith("{")]


@pytest.mark.timeout(400)
def test_the_daemon_starts_with_what_the_image_brings_along(
    containers: Containers, daemon: subprocess.Popen[str]
) -> None:
    """Nothing is compiled: everything that it keeps is a copy."""
    root = cache_root()
    assert root is not None
    kept = [file for file in (containers.folder / "cache").rglob("*.nbc") if file.is_file()]
    assert len(kept) > 50
    for file in kept:
        assert file.read_bytes() == (root / file.parent.name / file.name).read_bytes()
    assert "crew.warm" in {line["event"] for line in log_of(containers)}


@pytest.mark.timeout(400)
def test_the_demo_drives_a_daemon_in_another_container(
    containers: Containers, daemon: subprocess.Popen[str]
) -> None:
    command = [containers.here(each, "yard") for each in SERVICES["yard"]["command"]]
    found = containers.run("yard", "byway", *command, "--seconds", "6", "--json")
    assert found.returncode == 0, (found.stdout, found.stderr)
    told = json.loads(found.stdout.splitlines()[-1])
    assert told["collisions"] == []
    assert told["answers"]["route"] >= 3
    assert (containers.folder / "out" / "yard.png").read_bytes().startswith(b"\x89PNG")
    assert [line for line in log_of(containers) if line["level"] in ("error", "critical")] == []


@pytest.mark.timeout(400)
def test_keys_open_what_their_roles_allow(
    containers: Containers, daemon: subprocess.Popen[str]
) -> None:
    endpoint = containers.here("tcp://daemon:7461", "yard")
    keys = containers.folder / "yard-keys"
    ask = ["byway", "ask", "tug", "--start", "45,12,0", "--goal", "47,12,0", "-e", endpoint]
    for key, status in (("tug-3", 0), ("yard", 4)):
        assert containers.run("yard", *ask, "--keys", f"{keys}/{key}.key").returncode == status
    nobody = containers.run("yard", "byway", "health", "-e", endpoint)
    assert nobody.returncode == 4
    assert "lets nobody in without keys" in nobody.stderr


@pytest.mark.timeout(400)
def test_in_its_container_the_daemon_can_write_nowhere_but_into_its_cache(
    containers: Containers, daemon: subprocess.Popen[str]
) -> None:
    if not containers.is_shut_in:
        pytest.skip("this machine does not let us make file systems read-only")
    for place in ("/tmp", str(containers.folder / "daemon-keys"), str(ROOT)):
        tried = containers.run("daemon", "sh", "-c", f"touch {place}/byway-probe")
        assert tried.returncode != 0
    assert containers.run("daemon", "touch", str(containers.folder / "cache/p")).returncode == 0
