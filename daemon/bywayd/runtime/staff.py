"""
The crew as the front has it: who is there, how to start, reach and end them.

The template is a fresh interpreter that warms up and then forks on request. Each newcomer has
a channel to the front from the moment it is ordered; its process number arrives a little later
and is held as a pidfd, which cannot come to mean another process. Somebody is lost when their
process has ended, and is reported once, after all they had still said. Whoever closes or
garbles their channel is killed first, so that a lost surveyor has certainly stopped writing.

If the template dies, nobody else does; a new one is started, and newcomers wait for it.
"""

import contextlib
import os
import select
import signal
import socket
import subprocess
import sys
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Final, Literal, TypeAlias

import msgpack

from bywayd.crew.channel import (
    Channel,
    ChannelBroken,
    ChannelClosed,
    ChannelFull,
    channel_pair,
)
from bywayd.crew.memory import SiteMemory
from bywayd.runtime.processes import signals_of_the_front, single_threaded, start_module
from bywayd.runtime.watch import Watch

Role: TypeAlias = Literal["worker", "surveyor", "clerk"]
Message: TypeAlias = dict[str, Any]

#: What a worker may leave unread before it counts as stuck: some jobs.
worker_unsent_bytes_max: Final = 4 * 1024 * 1024
#: What the surveyor may leave unread: one batch is out at a time, and it may be large.
surveyor_unsent_bytes_max: Final = 512 * 1024 * 1024
#: What the clerk may leave unread while the disk keeps it: one batch is out at a time.
clerk_unsent_bytes_max: Final = 64 * 1024 * 1024
#: How long the clerk may take, at the end, to leave its file in order.
clerk_leave_s: Final = 1.0

#: A template that dies so often before it was ever warm will not come right by itself.
template_failures_max: Final = 3


class TemplateFailed(Exception):
    """The template cannot start; without it there will never be a worker."""


@dataclass(frozen=True)
class StaffSettings:
    """How the crew is started."""

    #: Module with what surveyor and workers can do.
    skills: str
    nice: int = 10
    cores: tuple[int, ...] = ()


@dataclass(eq=False)
class Member:
    """One surveyor or worker, from the order to the loss."""

    role: Role
    number: int
    channel: Channel
    pid: int | None = None
    pidfd: int | None = None
    #: Why it was or is to be killed; empty as long as it is not.
    killed: str = ""
    #: Its channel has ended.
    silent: bool = False


@dataclass(eq=False)
class _Template:
    process: "subprocess.Popen[bytes]"
    control: socket.socket
    pidfd: int
    warm: bool = False


@dataclass
class StaffReports:
    """What the staff tells; each is called from within a turn of the loop."""

    message: Callable[[Role, int, Message], None]
    lost: Callable[[Role, int, str], None]
    progress: Callable[[int, int, str], None]
    warm: Callable[[], None]
    said: Callable[[str], None]
    template_lost: Callable[[str], None]


@dataclass
class Staff:
    """Owns the template, all members, and the descriptors of both. One thread."""

    # -- fixed after construction
    settings: StaffSettings
    memory: SiteMemory
    watch: Watch
    reports: StaffReports

    # -- owned by the loop
    members: dict[tuple[Role, int], Member] = field(default_factory=dict)
    _template: _Template | None = None
    _failures: int = 0
    _ended: bool = False
    #: What was written to the common pipe after its last line feed.
    _said_rest: bytes = b""

    def __post_init__(self) -> None:
        # Everybody of the crew writes errors of last resort into one pipe, which the loop
        # reads: a terminal or log that nobody reads must not stop a worker either.
        self._said_from, self._said_to = os.pipe2(os.O_CLOEXEC)
        os.set_blocking(self._said_from, False)
        self.watch.add(self._said_from, self._read_said)

    @property
    def template_pid(self) -> int | None:
        return self._template.process.pid if self._template else None

    # -- the template ---------------------------------------------------------------------

    def start(self) -> None:
        """Start the template. Call `adopt_orphans` and, at first, make no sockets before."""
        ours, its = socket.socketpair(socket.AF_UNIX, socket.SOCK_SEQPACKET | socket.SOCK_CLOEXEC)
        ours.setblocking(False)
        command = [
            *(sys.executable, "-m", "bywayd.crew.template"),
            *("--front-pid", str(os.getpid())),
            *("--control", str(its.fileno()), "--memory", str(self.memory.descriptor)),
            *("--skills", self.settings.skills, "--nice", str(self.settings.nice)),
            *(("--cores", *map(str, self.settings.cores)) if self.settings.cores else ()),
        ]
        # A blocked signal stays blocked through exec and fork; Ctrl-C and a service manager
        # reach the whole group, and only the front shall act on them.
        before = signal.pthread_sigmask(signal.SIG_BLOCK, signals_of_the_front)
        try:
            process = subprocess.Popen(
                command,
                stdin=subprocess.DEVNULL,
                stdout=self._said_to,
                stderr=self._said_to,
                pass_fds=(its.fileno(), self.memory.descriptor),
                env={**os.environ, **single_threaded},
            )
        finally:
            signal.pthread_sigmask(signal.SIG_SETMASK, before)
            its.close()
        pidfd = os.pidfd_open(process.pid)
        self._template = _Template(process, ours, pidfd)
        self.watch.add(ours, self._read_control)
        self.watch.add(pidfd, self._template_ended)

    def _read_control(self) -> None:
        template = self._template
        while template is not None:
            try:
                raw = template.control.recv(4096)
            except BlockingIOError:
                return
            except OSError:
                raw = b""
            if not raw:
                self.watch.remove(template.control)
                return
            self._note(template, msgpack.unpackb(raw))

    def _note(self, template: _Template, news: Message) -> None:
        if news["say"] == "progress":
            self.reports.progress(news["done"], news["total"], news["name"])
        elif news["say"] == "warm":
            template.warm = True
            self._failures = 0
            self.reports.warm()
        elif news["say"] == "born":
            self._born(news)
        elif news["say"] == "unborn":
            self.reports.said(f"could not fork {news['role']} {news['number']}: {news['text']}")

    def _born(self, news: Message) -> None:
        member = self.members.get((news["role"], news["number"]))
        if member is None:
            return
        member.pid = news["pid"]
        # One that is reaped already has closed its channel, which says that it is gone.
        with contextlib.suppress(ProcessLookupError):
            self._hold(member, news["pid"])

    def _hold(self, member: Member, pid: int) -> None:
        """From now on this number means this process and no other."""
        member.pidfd = os.pidfd_open(pid)
        self.watch.add(member.pidfd, lambda: self._member_ended(member))
        if member.killed:
            self._kill_now(member)

    def _template_ended(self) -> None:
        template = self._template
        if template is None:
            return
        self._read_control()
        self._drop_template(template)
        how = how_ended(template.process.wait())
        if self._ended:
            return
        if not template.warm:
            self._failures += 1
            if self._failures >= template_failures_max:
                raise TemplateFailed(f"the template ended {self._failures} times: {how}")
        self.reports.template_lost(how)
        self.start()

    def _drop_template(self, template: _Template) -> None:
        self.watch.remove(template.control)
        self.watch.remove(template.pidfd)
        template.control.close()
        os.close(template.pidfd)
        self._template = None

    # -- members --------------------------------------------------------------------------

    def spawn(self, role: Role, number: int, first: Mapping[str, Any] | None = None) -> None:
        """
        Order a newcomer; it answers on its channel, or is reported lost.

        Args:
            first: A message that it finds waiting.
        """
        ours, its = channel_pair()
        member = Member(role, number, Channel(ours, unsent_bytes_max=_unsent_bytes_max[role]))
        self.members[role, number] = member
        self.watch.add(member.channel, lambda: self._hear(member))
        # If the template is dead or its queue full, the closed channel reports the loss.
        with contextlib.suppress(OSError):
            if role == "clerk":
                self._start_clerk(member, its)
            elif self._template is not None:
                order = msgpack.packb({"role": role, "number": number})
                socket.send_fds(self._template.control, [order], [its.fileno()])
        its.close()
        if first is not None:
            self.put(role, number, first)

    def _start_clerk(self, member: Member, its: socket.socket) -> None:
        """Start a clerk of its own: it must not wait until the template is warm."""
        descriptor = its.fileno()
        told = {"front-pid": os.getpid(), "channel": descriptor, "number": member.number}
        arguments = [word for name, value in told.items() for word in (f"--{name}", str(value))]
        member.pid = start_module("bywayd.crew.clerk", arguments, descriptor, self._said_to)
        self._hold(member, member.pid)

    def put(self, role: Role, number: int, message: Mapping[str, Any]) -> None:
        """Send a message; a member that cannot take it is on its way to be lost."""
        member = self.members.get((role, number))
        if member is None or member.silent or member.killed:
            return
        try:
            member.channel.put(message)
        except ChannelFull as fault:
            self._kill(member, f"does not read its channel: {fault}")
        except ChannelClosed:
            return  # what it said before is still to be read; the loss follows
        self._mind_unsent(member)

    def kill(self, role: Role, number: int, why: str) -> None:
        """End the process at once, whatever its state; the loss is reported when it is gone."""
        member = self.members.get((role, number))
        if member is not None and not member.killed:
            self._kill(member, why)

    def _kill(self, member: Member, why: str) -> None:
        member.killed = member.killed or why
        self._kill_now(member)

    def _kill_now(self, member: Member) -> None:
        if member.pidfd is None:
            return  # as soon as its number is known
        with contextlib.suppress(ProcessLookupError):
            signal.pidfd_send_signal(member.pidfd, signal.SIGKILL)

    def _mind_unsent(self, member: Member) -> None:
        self.watch.also_writable(member.channel, member.channel.wants_to_send)

    def _hear(self, member: Member) -> None:
        """Take in what a member says, as far as one turn goes; it may also have room again."""
        if not self._has(member) or member.silent:
            return
        try:
            if member.channel.wants_to_send:
                with contextlib.suppress(ChannelClosed):
                    member.channel.flush()
                self._mind_unsent(member)
            for message in member.channel.take():
                self.reports.message(member.role, member.number, message)
        except ChannelClosed:
            self._fall_silent(member)
        except ChannelBroken as fault:
            self._kill(member, f"sent nonsense: {fault}")
            self._fall_silent(member)

    def _fall_silent(self, member: Member) -> None:
        self.watch.remove(member.channel)
        member.silent = True
        self._read_control()  # its number may be waiting there
        if member.pidfd is None:
            # Gone before it could be known, or never made: the template was lost first.
            self._lost(member, member.killed or "was never there")

    def kill_silent(self) -> None:
        """
        End those that closed their channel and live on. Call this once in a while.

        Not at once: a process that ends closes its channel a moment before it is gone, and how
        it ended is worth knowing.
        """
        for member in self.members.values():
            if member.silent and not member.killed:
                self._kill(member, "closed its channel")

    def _member_ended(self, member: Member) -> None:
        """Its process is gone: hear what it still said, then report the loss."""
        if not self._has(member):
            return
        while not member.silent:
            try:
                messages = member.channel.take()
            except (ChannelClosed, ChannelBroken):
                break
            if not messages and not member.channel.has_message:
                break
            for message in messages:
                self.reports.message(member.role, member.number, message)
        how = _reap(member.pidfd)
        self._lost(member, f"{member.killed} ({how})" if member.killed else how)

    def _lost(self, member: Member, why: str) -> None:
        self.watch.remove(member.channel)
        member.channel.close()
        if member.pidfd is not None:
            self.watch.remove(member.pidfd)
            os.close(member.pidfd)
        del self.members[member.role, member.number]
        self.reports.lost(member.role, member.number, why)

    # -- the rest -------------------------------------------------------------------------

    def _has(self, member: Member) -> bool:
        # A turn calls everybody who was ready when it began; some are lost within it.
        return self.members.get((member.role, member.number)) is member

    @property
    def backlog(self) -> bool:
        """Whether a member has said more than one turn could take in."""
        return any(member.channel.has_message for member in self.members.values())

    def hear_backlog(self) -> None:
        """Take in what earlier turns left."""
        for member in list(self.members.values()):
            if member.channel.has_message:
                self._hear(member)

    def _read_said(self) -> None:
        with contextlib.suppress(BlockingIOError):
            self._said_rest += os.read(self._said_from, 16384)
            *lines, self._said_rest = self._said_rest.split(b"\n")
            if len(self._said_rest) > 4096:
                lines, self._said_rest = [*lines, self._said_rest], b""
            for line in lines:
                text = line.decode(errors="replace").rstrip()
                if text:
                    self.reports.said(text)

    def _dismiss_clerks(self) -> None:
        """Close the channel of a clerk that is well: it leaves its file in order, and ends."""
        for member in self.members.values():
            if member.role == "clerk" and member.pidfd is not None and not member.killed:
                self.watch.remove(member.channel)
                member.channel.close()
                select.select([member.pidfd], [], [], clerk_leave_s)

    def end(self) -> None:
        """Kill everybody and take leave of them."""
        self._ended = True
        template = self._template
        self._dismiss_clerks()
        for member in self.members.values():
            self._kill(member, "the daemon ends")
        if template is not None:
            template.process.kill()
            template.process.wait()
            self._drop_template(template)
        for member in list(self.members.values()):
            self.watch.remove(member.channel)
            member.channel.close()
            if member.pidfd is not None:
                self.watch.remove(member.pidfd)
                _reap(member.pidfd, wait=True)
                os.close(member.pidfd)
        self.members.clear()
        self.watch.remove(self._said_from)
        os.close(self._said_from)
        os.close(self._said_to)


_unsent_bytes_max: Final[Mapping[Role, int]] = {
    "worker": worker_unsent_bytes_max,
    "surveyor": surveyor_unsent_bytes_max,
    "clerk": clerk_unsent_bytes_max,
}


def _reap(pidfd: int | None, *, wait: bool = False) -> str:
    """Take leave of an ended child and say how it ended."""
    if pidfd is None:
        return "gone"
    try:
        ended = os.waitid(os.P_PIDFD, pidfd, os.WEXITED | (0 if wait else os.WNOHANG))
    except ChildProcessError:  # not ours yet when it died, or reaped by somebody else
        return "gone"
    if ended is None:
        return "gone"
    return how_ended(ended.si_status if ended.si_code == os.CLD_EXITED else -ended.si_status)


def how_ended(status: int) -> str:
    """Say how a process ended, from its exit status or the negative number of a signal."""
    if status >= 0:
        return f"ended with status {status}"
    try:
        return f"killed by {signal.Signals(-status).name}"
    except ValueError:
        return f"killed by signal {-status}"
