"""The file-backed queue under several writers and readers.

The expectation (each message delivered exactly once, none torn) is the definition of a queue: common practice, no
source.
"""

from __future__ import annotations

import multiprocessing
from collections import Counter
from pathlib import Path
from queue import Empty
from typing import Any

import pytest
from kombu import Connection, Queue

from config.celery import app

WRITERS = 3
READERS = 2
MESSAGES_PER_WRITER = 150


def connect(folder: Path) -> Connection:
    options = {
        "data_folder_in": str(folder / "messages"),
        "data_folder_out": str(folder / "messages"),
        "control_folder": str(folder / "control"),
        "polling_interval": 0.01,
    }
    return Connection("filesystem://", transport_options=options)


def write(folder: Path, writer: int) -> None:
    with connect(folder) as connection, connection.SimpleQueue("bells") as queue:
        for number in range(MESSAGES_PER_WRITER):
            queue.put({"writer": writer, "number": number, "padding": "x" * 5_000})


def read(folder: Path, seen: Any) -> None:
    with connect(folder) as connection, connection.SimpleQueue("bells") as queue:
        while True:
            try:
                message = queue.get(timeout=3)
            except Empty:
                return
            seen.put((message.payload["writer"], message.payload["number"]))
            message.ack()


def test_every_message_reaches_exactly_one_of_several_readers(tmp_path: Path) -> None:
    context = multiprocessing.get_context("spawn")
    seen = context.Queue()
    readers = [context.Process(target=read, args=(tmp_path, seen)) for _ in range(READERS)]
    writers = [context.Process(target=write, args=(tmp_path, writer)) for writer in range(WRITERS)]
    for process in readers + writers:
        process.start()
    for process in writers:
        process.join(60)
    received = Counter(seen.get(timeout=60) for _ in range(WRITERS * MESSAGES_PER_WRITER))
    for process in readers:
        process.join(60)
    assert [process.exitcode for process in readers + writers] == [0] * (READERS + WRITERS)
    assert seen.empty()
    assert set(received.values()) == {1}
    assert len(received) == WRITERS * MESSAGES_PER_WRITER
    assert list((tmp_path / "messages").iterdir()) == []


def test_messages_are_taken_oldest_first(tmp_path: Path) -> None:
    with connect(tmp_path) as connection, connection.SimpleQueue("bells") as queue:
        for number in range(20):
            queue.put(number)
        assert [queue.get(timeout=1).payload for _ in range(20)] == list(range(20))


def test_a_message_that_cannot_be_written_is_an_error_of_the_queue(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with connect(tmp_path) as connection:
        channel = connection.default_channel
        Queue("bells", channel=channel).declare()

        def no_room(*_: Any, **__: Any) -> None:
            raise OSError(28, "No space left on device")

        monkeypatch.setattr(Path, "write_text", no_room)
        with pytest.raises(connection.channel_errors, match="No space left on device"):
            channel._put("bells", {"body": "x"})
    assert list((tmp_path / "messages").iterdir()) == []


def test_the_application_uses_this_queue_when_nothing_else_is_named() -> None:
    assert app.connection().transport_cls == "filesystem"
    assert app.connection().transport.__class__.__module__ == "config.file_queue"
