"""A process killed with SIGKILL while it writes: all that was told to be on record is, and the trail is whole."""

from __future__ import annotations

import subprocess
import sys

from softsensor.records.audit import verify
from softsensor.records.engine import open_database
from softsensor.records.reader import events_since

WRITER = """
import sys
from softsensor.records.audit import Entry, append
from softsensor.records.engine import open_database
from softsensor.records.happenings import Event, record_event
from softsensor.records.writer import RecordsWriter

def work(connection, number):
    record_event(connection, Event(None, number, "note", str(number), key=str(number)))
    append(connection, Entry(number, "softsensor", "noted", str(number)))
    return number

with open_database(sys.argv[1]) as database, RecordsWriter(database, capacity=50, batch=5) as writer:
    number = int(sys.argv[2])
    while True:
        writer.submit(work, number).add_done_callback(lambda done: print(done.result(), flush=True))
        number += 1
"""


def written_until_killed(url: str, first: int, lines: int) -> int:
    """The last number that the process said was on record, of those read before and after it was killed."""
    command = [sys.executable, "-c", WRITER, url, str(first)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        told = [process.stdout.readline() for _ in range(lines)]
        process.kill()
        told += process.stdout.readlines()
    whole = [int(line) for line in told if line.endswith("\n")]
    assert whole == list(range(first, first + len(whole)))
    return whole[-1]


def test_what_was_told_to_be_on_record_survives_kills(database_url: str) -> None:
    first = 0
    for lines in (20, 33):
        last = written_until_killed(database_url, first, lines)
        with open_database(database_url) as database:
            numbers = [int(item.event.text) for item in events_since(database, limit=1_000_000)]
            report = verify(database)
        assert numbers == list(range(len(numbers)))
        assert len(numbers) > last >= first + lines - 1
        assert (report.whole, report.entries) == (True, len(numbers))
        first = len(numbers)
