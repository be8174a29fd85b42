"""The nodes as child processes: started, watched, and never left behind."""

from __future__ import annotations

import contextlib
import ctypes
import os
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from ..core.errors import SourceError

_PR_SET_PDEATHSIG = 1  # linux/prctl.h
_INTERRUPT_GRACE_S = 3.0
_TERMINATE_GRACE_S = 2.0
_TAIL_LINES = 15


class NodeDiedError(SourceError):
    """A node ended by itself; the message has its name, exit code and the end of its log."""


@dataclass
class NodeProcess:
    """One running node and where its output goes."""

    name: str
    process: subprocess.Popen[bytes]
    log: Path

    def stop(self) -> None:
        """Interrupt it, as Ctrl-C would, and wait; harsher ways if it does not end."""
        stop_all([self])

    def tail(self) -> str:
        """The last lines of its log."""
        lines = self.log.read_text(errors="replace").splitlines()[-_TAIL_LINES:]
        return "\n".join(f"    {line}" for line in lines) or "    (it printed nothing)"


class NodeGroup:
    """Child processes that end with this one, however it ends.

    Use as a context manager: leaving it stops all nodes in the reverse order of their start.
    """

    def __init__(self, log_folder: Path, environment: Mapping[str, str] | None = None) -> None:
        self.log_folder = log_folder
        self._environment = dict(environment) if environment is not None else None
        self.nodes: list[NodeProcess] = []

    def start(self, name: str, module: str, arguments: Sequence[str]) -> NodeProcess:
        """Start ``python -m module arguments…``; its output goes to ``<name>.log``."""
        log = self.log_folder / f"{name}.log"
        with log.open("wb") as file:
            process = subprocess.Popen(
                [sys.executable, "-u", "-m", module, *arguments],
                stdin=subprocess.DEVNULL,
                stdout=file,
                stderr=subprocess.STDOUT,
                env=self._environment,
                start_new_session=True,  # Ctrl-C reaches us first, we stop them in order
                preexec_fn=_end_with_parent,
            )
        node = NodeProcess(name, process, log)
        self.nodes.append(node)
        return node

    def check(self) -> None:
        """Raise when a node has ended.

        Raises
        ------
        NodeDiedError
            For the first one found.
        """
        for node in self.nodes:
            code = node.process.poll()
            if code is not None:
                raise NodeDiedError(
                    f"the {node.name} node ended by itself (exit code {code}). The end of its "
                    f"log {node.log}:\n{node.tail()}"
                )

    def forget(self, node: NodeProcess) -> None:
        """No longer watch a node that was stopped on purpose."""
        self.nodes.remove(node)

    def stop(self) -> None:
        """Stop all nodes, the last started first."""
        stop_all(list(reversed(self.nodes)))
        self.nodes.clear()

    def __enter__(self) -> NodeGroup:
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()


def stop_all(nodes: Sequence[NodeProcess]) -> None:
    """Interrupt, then terminate, then kill what is left."""
    for sign, grace_s in (
        (signal.SIGINT, _INTERRUPT_GRACE_S),
        (signal.SIGTERM, _TERMINATE_GRACE_S),
        (signal.SIGKILL, _TERMINATE_GRACE_S),
    ):
        running = [node for node in nodes if node.process.poll() is None]
        for node in running:
            _signal_group(node.process, sign)
        _wait(running, grace_s)


def _end_with_parent() -> None:
    """In the child: be terminated when the parent dies without a word (Linux)."""
    ctypes.CDLL(None).prctl(_PR_SET_PDEATHSIG, signal.SIGTERM)


def _signal_group(process: subprocess.Popen[bytes], sign: signal.Signals) -> None:
    with contextlib.suppress(ProcessLookupError):
        os.killpg(process.pid, sign)


def _wait(nodes: Sequence[NodeProcess], grace_s: float) -> None:
    end = time.monotonic() + grace_s
    for node in nodes:
        try:
            node.process.wait(max(0.0, end - time.monotonic()))
        except subprocess.TimeoutExpired:
            continue
