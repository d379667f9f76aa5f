"""`byway keys`: who may talk to the daemon."""

import contextlib
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final

import typer

from bywayd.commands.shared import AsJson, Status, console, fail, say_json

if TYPE_CHECKING:
    from bywayd.core.rights import Rights

DAEMON_FILE: Final = "daemon.key"
LIST_FILE: Final = "allowed.toml"

CAUTION: Final = (
    "A key file is a secret: whoever has it is let in as its owner. Carry it to its owner by a way "
    "that nobody else can read, delete it here, and take it off the list when it may be lost."
)

app = typer.Typer(
    help="Who may talk to the daemon: make keys, and keep the list of those who are allowed.",
    no_args_is_help=True,
)

Folder = Annotated[Path, typer.Argument(help="The folder of the daemon's key and list.")]
Name = Annotated[str, typer.Argument(help="Whose key it is.")]


@app.command()
def new(folder: Folder) -> None:
    """Make a folder with the daemon's key and an empty list. Do this as the daemon's user."""
    from byway.keys import make_private_folder, new_keys, save_keys
    from bywayd.allowed import save_allowed

    with _told():
        make_private_folder(folder)
        keys = new_keys("daemon")
        save_keys(keys, folder / DAEMON_FILE)
        if not (folder / LIST_FILE).exists():
            save_allowed({}, folder / LIST_FILE)
    out = console()
    out.print(f"Made {folder / DAEMON_FILE}; nobody is allowed yet: byway keys add {folder} ...")
    out.print("For the daemon's settings:", style="dim")
    where = folder.resolve()
    typer.echo(f'[keys]\nfile = "{where / DAEMON_FILE}"\nallowed = "{where / LIST_FILE}"')


@app.command()
def add(
    folder: Folder,
    name: Name,
    role: Annotated[str, typer.Option(help="source, driver, watcher or operator.")],
    layer: Annotated[
        list[str] | None,
        typer.Option(
            help="A layer that it may change; lidar.* for all that begin so. A source without may "
            "change all, a driver without none."
        ),
    ] = None,
    public: Annotated[
        str | None,
        typer.Option(help="The public key that its owner has made (byway keys pair)."),
    ] = None,
    to: Annotated[
        Path | None, typer.Option(help="The folder for the new key file; FOLDER if left out.")
    ] = None,
) -> None:
    """Allow somebody: make a key file, and put its owner on the list."""
    from byway.keys import check_key, load_keys, make_private_folder, new_keys, save_keys
    from bywayd.allowed import allowed_max, checked_layers, save_allowed
    from bywayd.core.rights import ROLES, Rights

    role_is = next((each for each in ROLES if each == role), None)
    if role_is is None:
        raise typer.BadParameter(f"{role!r} is none of {', '.join(ROLES)}", param_hint="--role")
    with _told():
        allowed = _load(folder)
        if name in {rights.name for rights in allowed.values()}:
            fail(Status.NO, f"{name} is on the list already; byway keys remove {folder} {name}")
        if len(allowed) >= allowed_max:
            fail(Status.NO, f"{allowed_max} are on the list already, there is no room for more")
        rights = Rights(role_is, name, checked_layers(role, layer or ()))
        keys = new_keys(name, load_keys(folder / DAEMON_FILE).public)
        file = (to or folder) / f"{name.replace('/', '_')}.key"
        if public is None:
            make_private_folder(file.parent)
            save_keys(keys, file)
        else:
            check_key(public, "public")
            if public in allowed:
                fail(Status.NO, f"that is the key of {allowed[public].name}")
        # Last: what is on the list has a key, or its owner has.
        save_allowed({**allowed, public or keys.public: rights}, folder / LIST_FILE)
    out = console()
    out.print(f"{name} is allowed, {_what(rights)}.")
    if public is None:
        out.print(f"Its key file: {file}")
        out.print(CAUTION, style="yellow")


@app.command()
def remove(folder: Folder, name: Name) -> None:
    """Take somebody off the list, and delete the key file if it is still in the folder."""
    from bywayd.allowed import save_allowed

    with _told():
        allowed = _load(folder)
        left = {key: rights for key, rights in allowed.items() if rights.name != name}
        if len(left) == len(allowed):
            fail(Status.NO, f"nobody on the list is called {name}")
        save_allowed(left, folder / LIST_FILE)
        (folder / f"{name.replace('/', '_')}.key").unlink(missing_ok=True)
    console().print(
        f"{name} is off the list. Within a second or two the daemon serves it no longer; events it "
        "hears until its connection ends: restart the daemon if that matters."
    )


@app.command("list")
def show(folder: Folder, as_json: AsJson = False) -> None:
    """Show who is allowed, and check the files."""
    from byway.keys import load_keys

    with _told():
        daemon = load_keys(folder / DAEMON_FILE)
        allowed = _load(folder)
    if as_json:
        listed: list[dict[str, Any]] = [
            {"name": rights.name, "role": rights.role, "layers": rights.layers, "public": public}
            for public, rights in allowed.items()
        ]
        say_json({"daemon": daemon.public, "allowed": listed})
        return
    from rich.table import Table

    table = Table("name", "role", "layers", "public key", box=None)
    for public, rights in allowed.items():
        table.add_row(rights.name, rights.role, ", ".join(rights.layers), _plain(public))
    out = console()
    out.print(table)
    out.print(f"The daemon's public key: {_plain(daemon.public)}")


@app.command()
def pair(
    file: Annotated[Path, typer.Argument(help="The key file to make.")],
    name: Annotated[str, typer.Option(help="Whose key it is.")],
    daemon: Annotated[str, typer.Option(help="The daemon's public key (byway keys list).")],
) -> None:
    """Make a key file where it will be used, so that its secret never travels."""
    from byway.keys import new_keys, save_keys

    with _told():
        keys = new_keys(name, daemon)
        save_keys(keys, file)
    out = console()
    out.print(f"Made {file}. Where the list is kept:")
    typer.echo(f"byway keys add FOLDER {name} --role ROLE --public '{keys.public}'")


def _load(folder: Path) -> "dict[str, Rights]":
    from bywayd.allowed import load_allowed

    return load_allowed(folder / LIST_FILE)


def _what(rights: "Rights") -> str:
    if rights.layers:
        return f"as {rights.role} for {', '.join(rights.layers)}"
    return f"as {rights.role}" + (" for all layers" if rights.role == "source" else "")


def _plain(key: str) -> str:
    # A key may have brackets in it, which would be taken for a style.
    from rich.markup import escape

    return escape(key)


@contextlib.contextmanager
def _told() -> Iterator[None]:
    """Tell what is wrong in a sentence."""
    from byway.errors import BadValue

    try:
        yield
    except BadValue as fault:
        fail(Status.NO, fault.text)
    except OSError as fault:
        fail(Status.NO, f"{fault.filename}: {fault.strerror}")
