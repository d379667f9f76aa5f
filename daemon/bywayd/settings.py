"""
What the daemon is told: vehicles, site, sockets, workers.

One TOML file, or the embedded `default.toml` when there is none, then overrides from the
environment. Every mistake is reported, all at once, each with its place: the reader of the
report has one file open in an editor and wants to go through it once.

Nothing here knows `byway_planning`: the front reads the settings and must not load a compiler.
"""

import difflib
import os
import re
import tempfile
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, ClassVar, Final, Literal

from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    ValidationError,
    ValidationInfo,
    ValidatorFunctionWrapHandler,
    WrapValidator,
    field_validator,
)
from pydantic_settings import (
    BaseSettings,
    PydanticBaseSettingsSource,
    SettingsConfigDict,
    SettingsError,
)

from byway import limits
from bywayd.settings_vehicles import VEHICLE_MODELS, VehicleSection
from bywayd.toml_places import lines_of_keys

DEFAULT_FILE: Final = Path(__file__).with_name("default.toml")
ENVIRONMENT_PREFIX: Final = "BYWAY_"
NESTED: Final = "__"
#: sockaddr_un holds 108 bytes, the last of them zero.
IPC_PATH_BYTES_MAX: Final = 107

Location = tuple[int | str, ...]
Name = Annotated[str, Field(pattern=limits.name_pattern)]
AnyVehicle = Annotated[VehicleSection, Field(discriminator="model")]
Metres = Annotated[float, Field(allow_inf_nan=False)]


class Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class SiteSection(Section):
    cell_m: Annotated[float, Field(ge=0.02, le=1.0)] = 0.1
    limits_m: tuple[Metres, Metres, Metres, Metres] | None = None
    origin_m: tuple[Metres, Metres] = (0.0, 0.0)
    #: How far ahead the sweep of a track is blocked, how often tracks are carried forward, and
    #: when those expire whose sources do not say.
    sweep_s: Annotated[float, Field(ge=0.0, le=60.0)] = 3.0
    carry_every_s: Annotated[float, Field(ge=0.02, le=10.0)] = 0.1
    track_expires_s: Annotated[float, Field(gt=0.0, le=3600.0)] = 2.0

    @field_validator("limits_m")
    @classmethod
    def _limits_enclose_ground(
        cls, limits_m: tuple[float, float, float, float] | None
    ) -> tuple[float, float, float, float] | None:
        if limits_m is not None:
            x_m_min, y_m_min, x_m_max, y_m_max = limits_m
            if not (x_m_min < x_m_max and y_m_min < y_m_max):
                raise ValueError("must be [x_min, y_min, x_max, y_max] with each min below its max")
        return limits_m


class LayerSection(Section):
    unknown_blocks: bool = False
    outlines_only: bool = False
    durable: bool = False
    #: How often a change is expected, and what is done when none comes.
    expected_period_s: Annotated[float, Field(gt=0.0, le=limits.expiry_s_max)] | None = None
    when_stale: Literal["ignore", "report", "refuse"] = "report"
    #: For how long what a scan says holds; for ever if left out.
    decay_s: Annotated[float, Field(gt=0.0, le=limits.expiry_s_max)] | None = None


class KeepSection(Section):
    #: Where durable layers outlast the daemon; nothing is kept without it.
    file: str | None = None
    bytes_max: Annotated[int, Field(ge=1024 * 1024, le=64 * 1024**3)] = 256 * 1024 * 1024

    @field_validator("file")
    @classmethod
    def _file_is_absolute(cls, file: str | None) -> str | None:
        if file is None:
            return None
        return _absolute(file)


class KeysSection(Section):
    #: The daemon's own key, and the list of who is allowed; both as `byway keys` makes them.
    file: str | None = None
    allowed: Annotated[str | None, Field(validate_default=True)] = None

    @field_validator("file", "allowed")
    @classmethod
    def _path_is_absolute(cls, file: str | None, info: ValidationInfo) -> str | None:
        if info.field_name == "allowed" and "file" in info.data:
            if file is None and info.data["file"] is not None:
                raise ValueError("is missing: with a key, say who is allowed")
            if file is not None and info.data["file"] is None:
                raise ValueError("a list of who is allowed means nothing without a key: set file")
        return None if file is None else _absolute(file)


class SocketsSection(Section):
    requests: tuple[str, ...] = Field(min_length=1)
    updates: tuple[str, ...] = Field(min_length=1)
    events: tuple[str, ...] = Field(min_length=1)
    #: What clients are told instead of where updates and events are bound.
    tell_updates: tuple[str, ...] = ()
    tell_events: tuple[str, ...] = ()
    #: How many peers may be connected at once; as many as there are descriptors for if left out.
    connections_max: Annotated[int, Field(ge=4, le=10_000)] | None = None

    #: Whether nobody is asked for keys.
    _on_loopback: ClassVar[bool] = True

    # Every check is one of a field: a check of the whole section would stay silent until every
    # field is right, and all mistakes are to be reported at once.
    @field_validator("requests", "updates", "events")
    @classmethod
    def _only_where_allowed_and_once(
        cls, endpoints: tuple[str, ...], info: ValidationInfo
    ) -> tuple[str, ...]:
        # Only where it is wanted: in a container there may be no place for such a folder.
        resolved = tuple(
            text.replace("{runtime}", str(runtime_folder())) if "{runtime}" in text else text
            for text in endpoints
        )
        taken = [endpoint for others in info.data.values() for endpoint in others]
        for endpoint in resolved:
            _check_endpoint(endpoint, on_loopback=cls._on_loopback)
            # Port 0 is whichever is free, and so never the same one twice.
            if endpoint in taken and not endpoint.endswith(":0"):
                raise ValueError(f"{endpoint} stands for more than one socket")
            taken.append(endpoint)
        return resolved

    @field_validator("tell_updates", "tell_events")
    @classmethod
    def _can_be_told(cls, endpoints: tuple[str, ...]) -> tuple[str, ...]:
        for endpoint in endpoints:
            _check_endpoint(endpoint, on_loopback=False)
            if endpoint.startswith("tcp://*:") or endpoint.endswith(":0"):
                raise ValueError(f"{endpoint}: nobody can connect to that")
        return endpoints


class OpenSocketsSection(SocketsSection):
    """With keys, other hosts may reach them."""

    _on_loopback: ClassVar[bool] = False


def _sockets_for_keys(
    told: object, _: ValidatorFunctionWrapHandler, info: ValidationInfo
) -> SocketsSection:
    keys = info.data.get("keys")
    has_keys = keys is None or keys.file is not None  # one that is wrong is told of as such
    section = OpenSocketsSection if has_keys else SocketsSection
    return section.model_validate(told)


def _usable_cores_but_one() -> int:
    return max(1, len(os.sched_getaffinity(0)) - 1)


class WorkersSection(Section):
    count: int = Field(default_factory=_usable_cores_but_one, ge=1, le=256)
    nice: Annotated[int, Field(ge=0, le=19)] = 10
    cores: tuple[Annotated[int, Field(ge=0, le=4095)], ...] = ()


class AnswersSection(Section):
    margin_s: Annotated[float, Field(ge=0.0005, le=1.0)] = 0.002
    budget_s_max: Annotated[float, Field(gt=0.0, le=limits.budget_s_max)] = limits.budget_s_max


class GuardsSection(Section):
    count_max: Annotated[int, Field(ge=1, le=4096)] = 256
    silence_s: Annotated[float, Field(gt=0.0, le=limits.expiry_s_max)] = 5.0
    budget_s: Annotated[float, Field(gt=0.0, le=limits.budget_s_max)] = 0.2


class LogSection(Section):
    level: Literal["debug", "info", "warning", "error"] = "info"
    form: Literal["auto", "human", "json"] = "auto"


class Settings(BaseSettings):
    """
    Everything the daemon is told, checked and complete. Make one with `load`.

    `vehicles` maps names to sections; `VehicleSection.arguments()` gives the keyword arguments
    of the class of the same model in `byway_planning`.
    """

    model_config = SettingsConfigDict(
        env_prefix=ENVIRONMENT_PREFIX, env_nested_delimiter=NESTED, extra="forbid", frozen=True
    )

    site: SiteSection = SiteSection()
    keep: KeepSection = KeepSection()
    layers: dict[Name, LayerSection] = Field(default_factory=dict)
    keys: KeysSection = KeysSection()
    # After the keys, for it depends on them.
    sockets: Annotated[SocketsSection, WrapValidator(_sockets_for_keys)]
    workers: WorkersSection = WorkersSection()
    answers: AnswersSection = AnswersSection()
    guards: GuardsSection = GuardsSection()
    log: LogSection = LogSection()
    vehicles: dict[Name, Annotated[VehicleSection, Field(discriminator="model")]] = Field(
        min_length=1
    )

    @field_validator("layers")
    @classmethod
    def _durable_layers_have_a_file(
        cls, layers: dict[str, LayerSection], info: ValidationInfo
    ) -> dict[str, LayerSection]:
        keep = info.data.get("keep")
        for name, layer in layers.items():
            if layer.durable and keep is not None and keep.file is None:
                raise ValueError(f"{name} is durable, and there is no file for it: set [keep] file")
        return layers

    @classmethod
    def settings_customise_sources(
        cls,
        settings_cls: type[BaseSettings],
        init_settings: PydanticBaseSettingsSource,
        env_settings: PydanticBaseSettingsSource,
        dotenv_settings: PydanticBaseSettingsSource,
        file_secret_settings: PydanticBaseSettingsSource,
    ) -> tuple[PydanticBaseSettingsSource, ...]:
        # The environment wins over the file, whose content comes in as arguments.
        return env_settings, init_settings


@dataclass(frozen=True)
class Mistake:
    """One thing wrong with the settings: where, which key, what about it."""

    place: str  #: "site.toml:12", "site.toml", "environment" or "built-in settings"
    key: str  #: dotted, "vehicles.tug.clearance_m"; empty when the whole file is meant
    text: str

    def __str__(self) -> str:
        return (
            f"{self.place}: {self.key}: {self.text}" if self.key else f"{self.place}: {self.text}"
        )


class BadSettings(ValueError):
    """The settings cannot be used. `mistakes` holds every reason."""

    def __init__(self, mistakes: list[Mistake]) -> None:
        super().__init__("\n".join(str(mistake) for mistake in mistakes))
        self.mistakes = mistakes


def load(file: Path | None = None) -> Settings:
    """
    Return the settings of a file, or the embedded ones, with the environment on top.

    Keys that the file does not have keep their embedded values, except in `vehicles`: a file
    with vehicles has all of them, so that no invented vehicle is offered on a real site.

    Raises:
        BadSettings: With every mistake in file and environment.
    """
    text = _read(file)
    embedded = tomllib.loads(DEFAULT_FILE.read_text())
    try:
        told = tomllib.loads(text)
    except tomllib.TOMLDecodeError as fault:
        raise BadSettings([Mistake(str(file), "", f"not TOML: {fault}")]) from None
    merged = {**embedded, **told}
    sections = {"site", "sockets", "workers", "answers", "guards", "log", "keep", "keys"}
    for section in sections & embedded.keys() & told.keys():
        if isinstance(told[section], dict):
            merged[section] = {**embedded[section], **told[section]}
    mistakes = _unknown_variables()
    try:
        settings = Settings(**merged)
    except ValidationError as fault:
        mistakes += _mistakes_of(fault, file, text, merged)
    except SettingsError as fault:
        mistakes.append(Mistake("environment", "", str(fault)))
    if mistakes:
        raise BadSettings(sorted(mistakes, key=_reading_order))
    return settings


def runtime_folder() -> Path:
    """Where ipc sockets live: a folder that belongs to this user and is closed to others."""
    for variable in ("RUNTIME_DIRECTORY", "XDG_RUNTIME_DIR"):
        if os.environ.get(variable):
            return Path(os.environ[variable]) / "byway"
    return Path(tempfile.gettempdir()) / f"byway-{os.getuid()}"


def state_folder() -> Path:
    """Where what is kept lives: a folder of this user that outlasts the machine's restart."""
    for variable in ("STATE_DIRECTORY", "XDG_STATE_HOME"):
        if os.environ.get(variable):
            return Path(os.environ[variable]) / "byway"
    return Path.home() / ".local" / "state" / "byway"


def _absolute(file: str) -> str:
    """Return a path with what stands for folders filled in; a ValueError if it is relative."""
    path = Path(file.replace("{state}", str(state_folder()))).expanduser()
    if not path.is_absolute():
        # A service is started from wherever, and must find its files again.
        raise ValueError(f"{file}: must be an absolute path, or begin with {{state}}")
    return str(path)


def _read(file: Path | None) -> str:
    if file is None:
        return ""
    try:
        return file.read_text()
    except (OSError, UnicodeDecodeError) as fault:
        reason = fault.strerror if isinstance(fault, OSError) else "not UTF-8 text"
        raise BadSettings([Mistake(str(file), "", f"cannot be read: {reason}")]) from None


def _check_endpoint(endpoint: str, *, on_loopback: bool) -> None:
    transport, _, address = endpoint.partition("://")
    if transport == "ipc":
        if not address or len(address.encode()) > IPC_PATH_BYTES_MAX:
            raise ValueError(f"{endpoint}: an ipc path has 1 to {IPC_PATH_BYTES_MAX} bytes")
        return
    host, _, port = address.rpartition(":")
    if transport != "tcp" or not re.fullmatch(r"\d{1,5}", port) or not int(port) < 65536:
        raise ValueError(f"{endpoint}: expected tcp://127.0.0.1:PORT or ipc://PATH")
    if not re.fullmatch(r"\*|[A-Za-z0-9.-]+|\[[0-9A-Fa-f:.]+\]", host):
        raise ValueError(f"{endpoint}: {host!r} is no host")
    # Anything else would let in whoever reaches the port.
    if on_loopback and not re.fullmatch(r"127(\.\d{1,3}){3}|\[::1\]|localhost", host):
        raise ValueError(
            f"{endpoint}: without keys TCP is served on loopback only, such as "
            f"tcp://127.0.0.1:{port}; byway keys makes some, [keys] names them"
        )


def _unknown_variables() -> list[Mistake]:
    """A misspelt override must not be ignored; without a double underscore it is none of ours."""
    mistakes = []
    for variable in sorted(os.environ):
        head, nested, _ = variable.removeprefix(ENVIRONMENT_PREFIX).partition(NESTED)
        if not variable.startswith(ENVIRONMENT_PREFIX) or not nested:
            continue
        if head.lower() not in Settings.model_fields:
            text = f"no section of this name{_meant(head.lower(), list(Settings.model_fields))}"
            mistakes.append(Mistake(f"environment {variable}", "", text))
    return mistakes


def _mistakes_of(
    fault: ValidationError, file: Path | None, text: str, merged: Mapping[str, Any]
) -> list[Mistake]:
    lines = lines_of_keys(text)
    mistakes = []
    errors = fault.errors()
    for error in errors:
        inner = any(_is_above(error["loc"], other["loc"]) for other in errors)
        if error["type"] == "too_short" and inner:
            continue  # only because an entry is wrong, and that is told already
        key = tuple(part for part in error["loc"] if part != "[key]")
        if len(key) > 2 and key[0] == "vehicles" and key[2] in VEHICLE_MODELS:
            key = (*key[:2], *key[3:])  # the model's name is in the location, but not in the file
        mistakes.append(Mistake(_place(key, file, lines), _dotted(key), _plain(error, key, merged)))
    return mistakes


def _is_above(outer: Location, inner: Location) -> bool:
    return len(outer) < len(inner) and inner[: len(outer)] == outer


def _reading_order(mistake: Mistake) -> tuple[str, int, str]:
    file, _, line = mistake.place.rpartition(":")
    return (file, int(line), "") if line.isdigit() else (mistake.place, 0, mistake.key)


def _place(key: Location, file: Path | None, lines: Mapping[tuple[str, ...], int]) -> str:
    names = tuple(str(part) for part in key)
    for length in range(len(names), 0, -1):
        variable = ENVIRONMENT_PREFIX + NESTED.join(names[:length]).upper()
        if variable in (name.upper() for name in os.environ):
            return f"environment {variable}"
    if file is None:
        return "built-in settings"
    for length in range(len(names), 0, -1):
        if names[:length] in lines:
            return f"{file}:{lines[names[:length]]}"
    return str(file)


def _dotted(key: Location) -> str:
    return "".join(f"[{p}]" if isinstance(p, int) else f".{p}" for p in key).removeprefix(".")


def _plain(error: Any, key: Location, merged: Mapping[str, Any]) -> str:
    kind, value = error["type"], error["input"]
    if kind == "extra_forbidden":
        return f"not a known key{_meant(str(key[-1]), _known_keys(key[:-1], merged))}"
    if kind == "missing":
        return "is missing"
    if kind == "union_tag_not_found":
        return f"model is missing: one of {', '.join(VEHICLE_MODELS)}"
    if kind == "union_tag_invalid":
        tag = error.get("ctx", {}).get("tag", "")
        return f"model is {tag!r}: must be one of {', '.join(VEHICLE_MODELS)}"
    if kind in ("too_short", "too_long"):
        told = str(error["msg"]).partition(" after validation")[0].replace("Tuple", "the list")
        return f"{told}, not {error['ctx']['actual_length']}"
    if kind == "string_pattern_mismatch":
        return "a name begins with a letter or digit; then also _ . : / # -; 64 characters at most"
    told = str(error["msg"]).removeprefix("Value error, ")
    told = told.replace("Input should be", "must be").replace("Input should have", "must have")
    shown = isinstance(value, int | float | str | bool) and kind != "value_error"
    return f"{told}, not {value!r}" if shown else told


def _known_keys(section: Location, merged: Mapping[str, Any]) -> list[str]:
    if not section:
        return list(Settings.model_fields)
    if section[0] == "vehicles" and len(section) > 1:
        model = merged["vehicles"].get(section[1], {}).get("model")
        return list(VEHICLE_MODELS[model].model_fields) if model in VEHICLE_MODELS else []
    sections: dict[str, type[Section]] = {
        "site": SiteSection,
        "layers": LayerSection,
        "keep": KeepSection,
        "keys": KeysSection,
        "sockets": SocketsSection,
        "workers": WorkersSection,
        "answers": AnswersSection,
        "guards": GuardsSection,
        "log": LogSection,
    }
    found = sections.get(str(section[0]))
    return list(found.model_fields) if found else []


def _meant(word: str, known: list[str]) -> str:
    near = difflib.get_close_matches(word, known, n=1)
    return f"; did you mean {near[0]}?" if near else ""
