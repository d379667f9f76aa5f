"""
The template: a process that imports and warms the planning room once, and then only forks.

What it forks has every kernel compiled and called and shares those pages, so a new worker is
there in some 20 ms and costs a few megabytes of its own. It is started with a fresh interpreter
(the front has threads and sockets that must not be copied) and told everything by its
arguments and descriptors:

* control   a socket of whole messages: orders to fork come in, each with the descriptor of the
            newcomer's channel; progress, `warm` and the process numbers of newcomers go out,
* memory    the site memory, inherited by all.

Newcomers are grandchildren: the process in between ends at once, the front adopts them.
"""

import argparse
import contextlib
import faulthandler
import gc
import os
import socket
import sys
import traceback
from typing import Any, Final

import msgpack

from bywayd.crew.channel import Channel, ChannelClosed
from bywayd.crew.kinship import call_oneself, die_with, step_back
from bywayd.crew.memory import SiteMemory
from bywayd.crew.skills import Skills, load_skills
from bywayd.crew.surveyor import survey
from bywayd.crew.worker import work

#: An order to fork is a few words.
order_bytes_max: Final = 4096


def main(arguments: list[str]) -> int:
    told = _parser().parse_args(arguments)
    die_with(told.front_pid)
    call_oneself("byway-template")
    faulthandler.enable()
    control = socket.socket(fileno=told.control)
    memory = SiteMemory(told.memory)
    skills = load_skills(told.skills)
    skills.warm(lambda done, total, name: _say_progress(control, done, total, name))
    # What exists now is never collected, so that the collector of a newcomer does not touch,
    # and thereby copy, the pages that all share.
    gc.collect()
    gc.freeze()
    _say(control, {"say": "warm"})
    while True:
        message, descriptors, _, _ = socket.recv_fds(control, order_bytes_max, 1)
        if not message:
            return 0
        order = msgpack.unpackb(message)
        _fork(control, memory, skills, order, descriptors[0], told)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="byway-template")
    parser.add_argument("--front-pid", type=int, required=True)
    parser.add_argument("--control", type=int, required=True, help="descriptor")
    parser.add_argument("--memory", type=int, required=True, help="descriptor")
    parser.add_argument("--skills", required=True, help="module")
    parser.add_argument("--nice", type=int, default=10, help="of workers")
    parser.add_argument("--cores", type=int, nargs="*", default=[], help="of workers")
    return parser


def _say(control: socket.socket, message: dict[str, Any]) -> None:
    # A front that is gone ends us by itself.
    with contextlib.suppress(BrokenPipeError):
        control.send(msgpack.packb(message))


def _say_progress(control: socket.socket, done: int, total: int, name: str) -> None:
    message = {"say": "progress", "done": done, "total": total, "name": name}
    # Progress is for people; when nobody reads, warming goes on.
    with contextlib.suppress(BlockingIOError, BrokenPipeError):
        control.send(msgpack.packb(message), socket.MSG_DONTWAIT)


def _fork(
    control: socket.socket,
    memory: SiteMemory,
    skills: Skills,
    order: dict[str, Any],
    end: int,
    told: argparse.Namespace,
) -> None:
    try:
        between = os.fork()
    except OSError as fault:
        # The front sees the channel closed; this says why.
        os.close(end)
        _say(control, {"say": "unborn", **order, "text": str(fault)})
        return
    if between == 0:
        _be_between(control, memory, skills, order, end, told)
    os.close(end)
    os.waitpid(between, 0)


def _be_between(
    control: socket.socket,
    memory: SiteMemory,
    skills: Skills,
    order: dict[str, Any],
    end: int,
    told: argparse.Namespace,
) -> None:
    """Fork the newcomer and end. Never returns, in neither process."""
    status = 1
    try:
        newcomer = os.fork()
        if newcomer == 0:
            control.close()
            _be_newcomer(memory, skills, order, end, told)
        else:
            _say(control, {"say": "born", **order, "pid": newcomer})
        status = 0
    except ChannelClosed:
        status = 0  # the front has no more use for us
    except BaseException:
        traceback.print_exc()
    finally:
        # Not sys.exit: nothing of the template's own may be tidied up here.
        sys.stderr.flush()
        os._exit(status)


def _be_newcomer(
    memory: SiteMemory, skills: Skills, order: dict[str, Any], end: int, told: argparse.Namespace
) -> None:
    die_with(told.front_pid)
    role, number = order["role"], order["number"]
    call_oneself(f"byway-{role[:4]}-{number}")
    channel = Channel(socket.socket(fileno=end))
    if role == "worker":
        step_back(told.nice, told.cores)
        work(channel, memory, skills)
    else:
        survey(channel, memory, skills)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
