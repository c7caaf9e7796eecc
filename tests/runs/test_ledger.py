"""What is kept comes back bit for bit, or is known to be damaged."""

import os
import re
import sqlite3
import struct
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from runs_samples import sample_batch

from nipc.errors import LedgerError
from nipc.runs import schema
from nipc.runs.keys import run_keys
from nipc.runs.ledger import Ledger
from nipc.runs.record import COLUMNS, Record, Status, from_row, to_row


def some_records(n=5, times=4, seed=2):
    batch = sample_batch(n)
    rng = np.random.default_rng(seed)
    return batch, [
        Record(
            key=key,
            status=Status.DONE,
            start=batch.states[row],
            coefficients=batch.forcing.coefficients[row],
            parameters=batch.parameters[row],
            states=rng.normal(size=(times, 2)),
            ended=np.nan,
            seconds=0.5,
        )
        for row, key in enumerate(run_keys(batch, "code"))
    ]


def filled(folder, n=5, times=4):
    batch, records = some_records(n, times)
    with Ledger.open(folder) as ledger:
        ledger.write(records, ledger.begin(batch, "code", "arc 1", n, 0))
    return batch, records


def read_all(folder, records):
    with Ledger.open(folder) as ledger:
        return {r.key: r for r in ledger.read([r.key for r in records])}, ledger.notes


def test_numbers_come_back_bit_for_bit(tmp_path):
    batch, records = some_records()
    odd = np.array([[np.nan, -0.0], [5e-324, np.inf], [1.0, np.pi], [-np.inf, 1e308]])
    records[0] = replace(records[0], states=odd, ended=0.1 + 0.2)
    records[1] = replace(
        records[1], status=Status.FAILED, states=None, kind="crash", reason="gone \udcff ü"
    )
    with Ledger.open(tmp_path) as ledger:
        ledger.write(records, ledger.begin(batch, "code", "arc 1", 5, 0))
    found, notes = read_all(tmp_path, records)
    assert notes == []
    assert found[records[0].key].states.tobytes() == odd.tobytes()
    assert found[records[0].key].ended == 0.1 + 0.2
    assert found[records[1].key].states is None
    assert found[records[1].key].reason == "gone ? ü"
    for record in records[2:]:
        assert found[record.key].states.tobytes() == record.states.tobytes()
        assert np.isnan(found[record.key].ended)


def test_the_file_holds_raw_little_endian_numbers_and_no_pickle(tmp_path):
    _, records = filled(tmp_path)
    connection = sqlite3.connect(tmp_path / "ledger.sqlite")
    (blob, m, d) = connection.execute(
        "SELECT states, n_times, n_states FROM runs WHERE key = ?", (records[0].key,)
    ).fetchone()
    connection.close()
    assert struct.unpack(f"<{m * d}d", blob) == tuple(records[0].states.ravel())


def test_a_later_attempt_replaces_an_earlier_one(tmp_path):
    batch, records = some_records(1)
    failed = replace(records[0], status=Status.FAILED, states=None, kind="crash")
    with Ledger.open(tmp_path) as ledger:
        number = ledger.begin(batch, "code", "arc 1", 1, 0)
        ledger.write([failed], number)
        ledger.write([replace(records[0], attempt=2)], number)
        assert ledger.find([failed.key]) == {failed.key: (Status.DONE, 2)}
        assert ledger.count() == 1


@settings(max_examples=200, deadline=None)
@given(st.data())
def test_no_bit_of_a_row_can_change_unseen(data):
    _, records = some_records(1)
    row = list(to_row(replace(records[0], ended=0.75, reason="why"), 1, 1, 0.0))
    place = data.draw(st.integers(0, len(COLUMNS) - 1))
    value = row[place]
    if value == b"":
        row[place] = b"\0"
    elif isinstance(value, bytes):
        raw = bytearray(value)
        bit = data.draw(st.integers(0, 8 * len(raw) - 1))
        raw[bit // 8] ^= 1 << bit % 8
        row[place] = bytes(raw)
    elif isinstance(value, float):
        raw = bytearray(struct.pack("<d", value))
        bit = data.draw(st.integers(0, 63))
        raw[bit // 8] ^= 1 << bit % 8
        row[place] = struct.unpack("<d", raw)[0]
    elif isinstance(value, int):
        row[place] = value ^ (1 << data.draw(st.integers(0, 40)))
    else:
        row[place] = value + data.draw(st.sampled_from(["x", " ", "\0"]))
    assert from_row(tuple(row)) is None


def test_a_changed_number_is_found_and_its_block_with_it(tmp_path, monkeypatch):
    """Also in a file too large to be examined as a whole on each start."""
    batch, records = some_records(5)
    blocks = [replace(r, block=b"b" * 32, block_size=3) for r in records[:3]] + records[3:]
    with Ledger.open(tmp_path) as ledger:
        ledger.write(blocks, ledger.begin(batch, "code", "arc 1", 5, 0))
    connection = sqlite3.connect(tmp_path / "ledger.sqlite")
    wrong = records[1].states + np.eye(4, 2) * 1e-12
    connection.execute(
        "UPDATE runs SET states = ? WHERE key = ?", (wrong.tobytes(), records[1].key)
    )
    connection.commit()
    connection.close()
    monkeypatch.setattr(schema, "_SMALL", 0)
    with Ledger.open(tmp_path) as ledger:
        assert ledger.notes == []
        keys = [r.key for r in records]
        assert records[1].key not in {r.key for r in ledger.read(keys)}
        assert "damaged" in ledger.notes[0]
        assert set(ledger.find(keys)) == {records[3].key, records[4].key}


def test_a_second_writer_is_refused_with_the_pid_of_the_first(tmp_path):
    holder = subprocess.Popen(
        [sys.executable, "-c",
         "import sys, time; from pathlib import Path; from nipc.runs.ledger import Ledger;"
         "ledger = Ledger.open(Path(sys.argv[1])); print('open', flush=True); time.sleep(60)",
         str(tmp_path)],
        stdout=subprocess.PIPE,
        text=True,
    )  # fmt: skip
    try:
        assert holder.stdout.readline() == "open\n"
        with pytest.raises(LedgerError, match=rf"in use by process {holder.pid} on "):
            Ledger.open(tmp_path)
    finally:
        holder.kill()
        holder.wait()
    Ledger.open(tmp_path).close()  # a lock does not outlive its process


def test_this_process_cannot_open_it_twice_either(tmp_path):
    with Ledger.open(tmp_path), pytest.raises(LedgerError, match=f"process {os.getpid()} "):
        Ledger.open(tmp_path)


def test_a_ledger_of_a_later_version_is_refused_and_left_alone(tmp_path):
    filled(tmp_path)
    connection = sqlite3.connect(tmp_path / "ledger.sqlite")
    connection.execute("PRAGMA user_version = 2")
    connection.close()
    with pytest.raises(LedgerError, match="later nipc"):
        Ledger.open(tmp_path)
    assert [p.name for p in tmp_path.glob("*damaged*")] == []


def _open_as_nobody(folder):
    """What Ledger.open says to a user without rights there; in a process that gives up its own."""
    reader, writer = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            if os.geteuid() == 0:
                os.setgid(65534)
                os.setuid(65534)
            Ledger.open(folder)
            os.write(writer, b"opened")
        except BaseException as error:
            os.write(writer, f"{type(error).__name__}: {error}".encode())
        os._exit(0)
    os.close(writer)
    os.waitpid(child, 0)
    with os.fdopen(reader) as file:
        return file.read()


@pytest.mark.parametrize("what", ["new", "kept"])
def test_a_read_only_folder_is_refused_in_words(what):
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        if what == "kept":
            filled(folder)
        folder.chmod(0o555)
        said = _open_as_nobody(folder)
        folder.chmod(0o755)
    assert re.match(r"LedgerError: .*cannot be written \(Permission denied\)", said)


def test_a_folder_that_cannot_be_made_is_refused_in_words():
    with pytest.raises(LedgerError, match="cannot be made"):
        Ledger.open(Path("/proc/nipc-work"))


def test_a_clock_that_is_set_back_changes_nothing(tmp_path, monkeypatch):
    batch, records = some_records(4)
    with Ledger.open(tmp_path) as ledger:
        number = ledger.begin(batch, "code", "arc 1", 4, 0)
        ledger.write(records[:2], number)
        monkeypatch.setattr(time, "time", lambda: 1000.0)
        ledger.write(records[2:], number)
    found, notes = read_all(tmp_path, records)
    assert len(found) == 4
    assert notes == []
