"""The image and the two containers: what their files promise, as far as it can be read in them."""

import re
from pathlib import Path
from typing import Any

import pytest
import yaml

from bywayd.settings import load
from bywayd.yard.desk import LAYERS, SITE, layer_of
from bywayd.yard.scene import LIMITS_M, ROUNDS

ROOT = Path(__file__).resolve().parents[2]
COMPOSE: dict[str, Any] = yaml.safe_load((ROOT / "deploy" / "compose.yaml").read_text())
SERVICES: dict[str, Any] = COMPOSE["services"]


def dockerfile() -> list[tuple[str, str]]:
    """Return instructions and their arguments, continued lines joined."""
    text = re.sub(r"\\\n\s*", "", (ROOT / "deploy" / "Dockerfile").read_text())
    lines = [line for line in text.splitlines() if line and not line.startswith("#")]
    return [(line.partition(" ")[0], line.partition(" ")[2]) for line in lines]


INSTRUCTIONS = dockerfile()


def last_stage() -> list[tuple[str, str]]:
    begins = [i for i, (word, _) in enumerate(INSTRUCTIONS) if word == "FROM"]
    return INSTRUCTIONS[begins[-1] :]


def environment() -> dict[str, str]:
    told = " ".join(rest for word, rest in last_stage() if word == "ENV")
    return dict(re.findall(r'(\w+)="?([^\s"]*)"?', told))


def test_the_base_is_an_exact_version() -> None:
    (base,) = (rest for word, rest in INSTRUCTIONS if word == "ARG" and rest.startswith("BASE="))
    assert re.fullmatch(r"BASE=python:3\.1[123]\.\d+-slim-[a-z]+(@sha256:[0-9a-f]{64})?", base)
    for word, rest in INSTRUCTIONS:
        if word == "FROM":
            assert rest.startswith("${BASE}")


def test_packages_are_exact_versions_too() -> None:
    installs = [rest for word, rest in INSTRUCTIONS if word == "RUN" and "pip install" in rest]
    assert installs
    for install in installs:
        assert install.count("pip install") == install.count("--constraint")
    built = " ".join(installs)
    assert "--no-build-isolation" in built


def test_it_does_not_run_as_root() -> None:
    users = [rest for word, rest in last_stage() if word == "USER"]
    assert len(users) == 1
    assert re.fullmatch(r"[1-9]\d{3,}:[1-9]\d{3,}", users[0])
    # Nothing is done after that as somebody else.
    after = [word for word, _ in last_stage()]
    assert "RUN" not in after[after.index("USER") :]


def test_kernels_are_compiled_in_for_any_cpu_and_cannot_be_changed_by_who_runs_them() -> None:
    (warm,) = (rest for word, rest in INSTRUCTIONS if word == "RUN" and "byway warm" in rest)
    told = environment()
    assert f"BYWAY_CACHE_DIR={told['BYWAY_WARM_DIR']}" in warm
    # The same CPU at both times, or nothing of it would be found.
    assert f"NUMBA_CPU_NAME={told['NUMBA_CPU_NAME']}" in warm
    assert told["BYWAY_WARM_DIR"] != told["BYWAY_CACHE_DIR"]
    copies = [rest for word, rest in last_stage() if word == "COPY"]
    assert all("--chown" not in copy for copy in copies)


def test_what_is_kept_out_of_the_image_is_everything_but_what_it_needs() -> None:
    ignored = (ROOT / "deploy" / "Dockerfile.dockerignore").read_text().split("\n")
    assert "*" in ignored
    copied = {
        source
        for word, rest in INSTRUCTIONS
        if word == "COPY" and "--from" not in rest
        for source in rest.split()[:-1]
    }
    assert {f"!{source}" for source in copied} == {line for line in ignored if line[:1] == "!"}
    for source in copied:
        assert (ROOT / source).exists()


@pytest.mark.parametrize("name", SERVICES)
def test_every_container_is_shut_in(name: str) -> None:
    service = SERVICES[name]
    assert service["read_only"] is True
    assert re.fullmatch(r"[1-9]\d{3,}:[1-9]\d{3,}", service["user"])
    assert service["user"] == next(rest for word, rest in last_stage() if word == "USER")
    assert service["cap_drop"] == ["ALL"]
    assert service["security_opt"] == ["no-new-privileges:true"]
    assert not service.get("privileged")
    assert "cap_add" not in service
    # Only where the demo is do they meet, and nobody from outside comes there.
    assert "ports" not in service
    assert service.get("network_mode") == "none" or service["networks"] == ["site"]
    assert COMPOSE["networks"]["site"]["internal"] is True


def test_the_image_has_a_folder_of_the_users_for_every_volume() -> None:
    """A volume begins with owner and mode of the folder that it is put upon."""
    (made,) = (rest for word, rest in last_stage() if word == "RUN" and "install -d" in rest)
    folders = made.partition("-m 0700")[2].split()
    for service in SERVICES.values():
        for volume in service.get("volumes", ()):
            assert volume.split(":")[1] in folders


def test_the_daemon_can_write_into_its_cache_folder_and_nowhere_else() -> None:
    writable = [each for each in SERVICES["daemon"]["volumes"] if not each.endswith(":ro")]
    assert [each.split(":")[1] for each in writable] == [environment()["BYWAY_CACHE_DIR"]]
    assert "tmpfs" not in SERVICES["daemon"]


def test_the_yard_does_not_see_the_daemons_secret() -> None:
    of_yard = {each.split(":")[0] for each in SERVICES["yard"]["volumes"]}
    assert "daemon-keys" not in of_yard
    assert "daemon-keys:/etc/byway/keys:ro" in SERVICES["daemon"]["volumes"]
    assert "yard-keys" not in {each.split(":")[0] for each in SERVICES["daemon"]["volumes"]}


def test_the_settings_in_the_containers_are_good_and_those_of_the_demo(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    for name, text in SERVICES["daemon"]["environment"].items():
        monkeypatch.setenv(name, text)
    settings = load()
    assert settings.site.limits_m == LIMITS_M
    assert settings.keys.file is not None
    assert settings.keys.allowed is not None
    assert settings.sockets.connections_max == 64
    # Reached from the other container, by the ports that the image tells of.
    sockets = settings.sockets
    ports = [each for name in ("requests", "updates", "events") for each in getattr(sockets, name)]
    assert ports == ["tcp://*:7461", "tcp://*:7462", "tcp://*:7463"]
    (exposed,) = (rest for word, rest in last_stage() if word == "EXPOSE")
    assert exposed.split() == [each.rpartition(":")[2] for each in ports]


def test_everybody_in_the_yard_gets_a_key_that_allows_what_he_does_and_no_more() -> None:
    (script,) = SERVICES["keys"]["command"]
    joined = script.replace("\\\n", " ")
    (units,) = re.findall(r"for unit in ([^;]+);", script)
    added = {
        name: (role, set(re.findall(r"--layer '?([^\s']+)", rest)))
        for names, role, rest in re.findall(r"keys add \S+ (\S+) --role (\w+)(.*)", joined)
        for name in (units.split() if names == "$$unit" else [names])
    }
    roles = {name: role for name, (role, _) in added.items()}
    drivers = dict.fromkeys((each.unit for each in ROUNDS), "driver")
    assert roles == {SITE: "source", "look": "watcher", **drivers}
    layers = [layer for _, allowed in added.values() for layer in allowed]
    assert sorted(layers) == sorted([*LAYERS, "unit.*"])  # each by one of them alone
    assert "unit.*" in added[SITE][1]
    assert all(layer_of(each.unit).startswith("unit.") for each in ROUNDS)
