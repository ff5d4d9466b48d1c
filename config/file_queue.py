"""The file-backed queue: kombu's file system transport, made safe for several readers and writers at once.

The transport as it comes creates a message file before it has written it and moves messages through the
machine's shared temporary folder; a reader that looks in between finds an empty message and its worker stops.
Here a file appears under its name only when complete, and whoever deletes it owns it: both are single steps of
the file system.

For one machine: trials, tests and small installations. A worker killed while holding messages loses them, which
costs time and nothing else, as the periodic sweep rings again for every request left unfinished.
"""

from __future__ import annotations

import os
import time
import uuid
from pathlib import Path
from queue import Empty
from typing import Any

from kombu.exceptions import ChannelError
from kombu.transport import filesystem
from kombu.utils.json import dumps, loads


class Channel(filesystem.Channel):
    """A channel whose messages are whole files in one folder, oldest first."""

    def __init__(self, *args: Any, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self._messages.mkdir(parents=True, exist_ok=True)
        self.control_folder.mkdir(parents=True, exist_ok=True)

    @property
    def _messages(self) -> Path:
        return Path(self.data_folder_in)

    def _put(self, queue: str, payload: dict[str, Any], **kwargs: Any) -> None:
        """File a message under the queue's name."""
        name = f"{time.time_ns():020d}_{uuid.uuid4()}.{queue}.msg"
        try:
            _write_whole(self._messages / name, dumps(payload))
        except OSError as error:
            raise ChannelError(f"The message {name} could not be filed: {error}.") from error

    def _get(self, queue: str) -> dict[str, Any]:
        """Take the oldest message of a queue, or raise Empty."""
        for name in sorted(os.listdir(self._messages)):
            if name.partition(".")[2] != f"{queue}.msg":
                continue
            path = self._messages / name
            try:
                payload = path.read_bytes()
                path.unlink()
            except FileNotFoundError:
                continue  # Another worker took it first.
            return loads(payload)
        raise Empty

    def _queue_bind(self, exchange: str, routing_key: str, pattern: str, queue: str) -> None:
        """Remember that an exchange hands on to a queue."""
        binding = filesystem.exchange_queue_t(routing_key or "", pattern or "", queue or "")
        known = self.get_table(exchange)
        if binding not in known:
            # Two processes binding at once write the same line: the queues are fixed by the settings.
            _write_whole(self._exchange_file(exchange), dumps([binding, *known]))


class Transport(filesystem.Transport):
    """What `filesystem://` means in this project (registered in `config.celery`)."""

    Channel = Channel


def _write_whole(path: Path, text: str) -> None:
    """Write a file that nobody can see before it is complete."""
    unfinished = path.with_name(f".{uuid.uuid4()}.unfinished")
    try:
        unfinished.write_text(text, encoding="utf-8")
        unfinished.replace(path)
    except OSError:
        unfinished.unlink(missing_ok=True)
        raise
