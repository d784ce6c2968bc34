"""The journal read back: what is sound comes out, what is not is named, and what is no journal is refused in words."""

import os
import sqlite3
import stat

import numpy as np
import pytest

from bridgeio.errors import FileError
from bridgeio.frames import Conditions, Nameplate, Tallies, Unknown
from bridgeio.journal import Journal, Mark, Stretch
from bridgeio.journal.book import Block, Book
from bridgeio.journal.pack import Timed
from bridgeio.journal.schema import APPLICATION_ID, network_file_system

START_US = 1_790_136_727_000_000  # ends in 04:12:07 UTC
PLATE = Nameplate(3, 500, 1, 7, 0xABCD, 10, 16, 65535, 2500, 1, 0x1234, 5, "shack\x1b[2J")
STRETCH = Stretch("/dev/ttyUSB0", START_US, False, PLATE, 'schema = 1\nname = "mine"\n')


def second(number, n=100, missing=0):
    """A block of n tallies, the frames of second `number`."""
    ms = number * 1000 + np.arange(n) * (1000 // n)
    rng = np.random.default_rng(number)
    made = Tallies.of(np.arange(n), ms, np.rint(rng.normal(30_000, 0.8, n)), np.rint(rng.normal(300, 0.8, n)))
    return Block([Timed(made, START_US + ms * 1000)], START_US, missing=missing)


def write(path, *rows):
    """A journal with these rows, or these rows more."""
    book = Book(path)
    book.write(rows)
    book.close()


@pytest.fixture
def journal(tmp_path):
    """A sound journal of ten seconds."""
    path = tmp_path / "contest.journal"
    write(path, STRETCH, *(second(k) for k in range(10)))
    return path


def change(path, sql, *values):
    """Another hand at the file."""
    with sqlite3.connect(path) as link:
        link.execute(sql, values)
    link.close()


def test_everything_comes_back_with_its_stretch_and_marks(tmp_path):
    """Frames, times, the stretch with nameplate and bridge file, and marks are read as they were written."""
    path = tmp_path / "contest.journal"
    rare = [Timed(PLATE, np.array([START_US])), Timed(Unknown(0x1A, b"\x1a\1\2\0\0\0!"), np.array([START_US + 2000]))]
    mark = Mark("note", START_US, "antenna turned \x07", 0.0)
    write(path, STRETCH, second(0), mark, Block(rare, START_US))
    with Journal(path) as book:
        items = list(book.items())
        assert [one.item for one in items[1:]] == [one.item for one in rare]
        assert [int(one.utc_us[0]) for one in items] == [START_US, START_US, START_US + 2000]
        assert items[0].item.forward.tolist() == second(0).timed[0].item.forward.tolist()
        assert book.stretches == {1: STRETCH}
        assert book.marks == [mark]
        assert book.account().words == "complete"


def test_journal_is_for_its_owner_only(journal):
    """The file and what SQLite puts beside it have mode 0600."""
    assert stat.S_IMODE(journal.stat().st_mode) == 0o600
    book = Book(journal)
    book.write([STRETCH])
    beside = sorted(journal.parent.iterdir())
    assert len(beside) == 4
    assert {stat.S_IMODE(one.stat().st_mode) for one in beside} == {0o600}
    book.close()
    assert list(journal.parent.iterdir()) == [journal]


def test_disk_is_told_to_keep_what_is_committed(journal):
    """The writer runs in WAL with full synchronisation, and the file says what it is."""
    book = Book(journal)
    pragmas = [
        book._link.execute(f"PRAGMA {name}").fetchone()[0]
        for name in ("journal_mode", "synchronous", "application_id", "user_version")
    ]
    book.close()
    assert pragmas == ["wal", 2, APPLICATION_ID, 1]


def test_journal_resumed_goes_on_in_a_new_stretch(journal):
    """A journal opened again keeps its blocks, numbers and chain, and the new frames have their own stretch."""
    write(journal, Stretch("sim:", START_US, True), second(20))
    with Journal(journal) as book:
        assert [(b.id, b.stretch) for b in book.blocks()] == [(k, 1) for k in range(1, 11)] + [(11, 2)]
        assert book.stretches[2].simulated
        assert book.bad == []


def test_journal_can_be_read_while_it_is_written(journal):
    """A reader sees what was committed so far, and goes on seeing what comes."""
    book = Book(journal)
    with Journal(journal) as reader:
        for k in range(10, 13):
            book.write([STRETCH, second(k)])
            assert sum(len(one.item) for one in reader.tallies()) == 100 * (k + 1)
    book.close()


def test_account_tells_what_is_missing_and_when(tmp_path):
    """A report can open with what is missing and the time of it."""
    path = tmp_path / "contest.journal"
    write(path, STRETCH, second(0, missing=3), *(second(k) for k in range(1, 5)))
    with Journal(path) as book:
        account = book.account()
    assert (account.sent, account.kept, account.missing) == (503, 500, 3)
    assert account.words == "complete but for 3 frames, 04:12:07"


@pytest.mark.parametrize("column", ["packed", "digest"])
def test_flipped_bit_is_found_by_the_crc_and_named_by_time(journal, column):
    """A bit flipped in a value costs that block alone, and the block is named by its time."""
    with sqlite3.connect(journal) as link:
        value = bytearray(link.execute(f"SELECT {column} FROM block WHERE id = 5").fetchone()[0])
    link.close()
    value[len(value) // 2] ^= 0x10
    change(journal, f"UPDATE block SET {column} = ? WHERE id = 5", bytes(value))
    with Journal(journal) as book:
        assert [block.id for block in book.blocks()] == [1, 2, 3, 4, 6, 7, 8, 9, 10]
        assert [(bad.first, bad.words) for bad in book.bad] == [(5, "does not agree with its CRC-32")]
        assert book.account().words == "complete but for 1 block that cannot be read, 04:12:10"


@pytest.mark.parametrize("column", ["utc_first_us", "frames", "missing", "unpacked", "largest_forward"])
def test_changed_summary_is_found_by_the_crc(journal, column):
    """The columns beside the packed frames are under the CRC too, whatever stands in them."""
    for value in (77, "text", None):
        change(journal, f"UPDATE block SET {column} = ? WHERE id = 5", value)
        with Journal(journal) as book:
            assert 5 not in [block.id for block in book.blocks()]
            assert [bad.first for bad in book.bad] == [5]


def test_block_taken_out_is_named(journal):
    """A block that is not there any more is named; the ones around it are read."""
    change(journal, "DELETE FROM block WHERE id IN (4, 5)")
    with Journal(journal) as book:
        assert len(list(book.blocks())) == 8
        assert [(bad.first, bad.number, bad.words) for bad in book.bad] == [(4, 2, "is not in the journal any more")]


def test_block_put_in_another_s_place_breaks_the_chain(tmp_path, journal):
    """A block with a right CRC of its own that does not follow the one before gives no counts."""
    other = tmp_path / "other.journal"
    write(other, STRETCH, *(second(k + 50) for k in range(10)))
    with sqlite3.connect(journal) as link:
        link.execute("ATTACH ? AS other", (str(other),))
        link.execute("REPLACE INTO block SELECT * FROM other.block WHERE id = 5")
    link.close()
    with Journal(journal) as book:
        assert 5 not in [block.id for block in book.blocks()]
        assert "does not follow the block before it" in book.bad[0].words


def test_damaged_pages_cost_only_the_blocks_on_them(tmp_path):
    """With random damage to the file, no wrong count comes out, and no traceback."""
    path = tmp_path / "contest.journal"
    write(path, STRETCH, *(second(k) for k in range(120)))
    sound = path.read_bytes()
    with Journal(path) as book:
        truth = {block.id: block.content for block in book.blocks()}
    rng, read, refused = np.random.default_rng(13), 0, 0
    for _ in range(60):
        data = bytearray(sound)
        at = int(rng.integers(len(data)))
        if rng.random() < 0.4:
            data[at] ^= 1 << int(rng.integers(8))
        elif rng.random() < 0.7:
            data[at : at + 512] = bytes(len(data[at : at + 512]))
        else:
            del data[at:]
        path.write_bytes(data)
        try:
            with Journal(path) as book:
                for block in book.blocks():
                    assert block.content == truth[block.id]
                    read += 1
        except FileError as error:
            refused += str(path) in str(error)
    assert read > 60 * 60
    assert 0 < refused < 30


def test_newer_schema_is_refused_and_left_as_it_is(journal):
    """A journal of a newer version is neither read nor written, and the words say what to do."""
    change(journal, "PRAGMA user_version = 2")
    before = journal.read_bytes()
    for opened in (Journal, Book):
        with pytest.raises(FileError, match=r"schema 2, this program knows up to 1.*newer version"):
            opened(journal)
    assert journal.read_bytes() == before


def test_files_that_are_no_journals_are_refused_and_left_as_they_are(tmp_path):
    """Text, another program's database, a folder and nothing at all are refused in words."""
    text, database = tmp_path / "notes.txt", tmp_path / "other.db"
    text.write_text("no journal, only words " * 100)
    change(database, "CREATE TABLE t (x)")
    before = text.read_bytes(), database.read_bytes()
    for path in (text, database):
        for opened in (Journal, Book):
            with pytest.raises(FileError, match=r"is no journal|another program"):
                opened(path)
    assert (text.read_bytes(), database.read_bytes()) == before
    with pytest.raises(FileError, match="no such file"):
        Journal(tmp_path / "nothing")
    with pytest.raises(FileError):
        Book(tmp_path / "nowhere" / "contest.journal")


MOUNTS = r"""
22 1 254:0 / / rw,relatime - ext4 /dev/vda rw
30 22 0:40 / /home/me/my\040share rw shared:5 - nfs4 server:/x rw
31 22 0:41 / /mnt/ssh rw - fuse.sshfs me@host: rw
32 31 0:42 / /mnt/ssh/local rw - tmpfs tmpfs rw
"""


@pytest.mark.parametrize(
    ("path", "kind"),
    [
        ("/home/me/log", None),
        ("/home/me/my share/log", "nfs4"),
        ("/mnt/ssh/log", "fuse.sshfs"),
        ("/mnt/ssh/local/log", None),
        ("/mnt/sshx/log", None),
    ],
)
def test_network_file_system_is_known_by_the_longest_mount(tmp_path, path, kind):
    """The mount that holds the path decides, names with spaces included."""
    assert network_file_system(tmp_path.__class__(path), MOUNTS) == kind


def test_journal_on_a_network_file_system_is_refused(tmp_path, monkeypatch):
    """No journal is made where another machine could write it too."""
    monkeypatch.setattr("bridgeio.journal.schema._mounts", lambda: "30 22 0:40 / / rw - nfs4 server:/x rw")
    with pytest.raises(FileError, match=r"network file system .nfs4.*local disk"):
        Book(tmp_path / "contest.journal")
    assert os.listdir(tmp_path) == []


def test_frequency_of_a_conditions_frame_comes_back(tmp_path):
    """Conditions keep a temperature below zero."""
    path = tmp_path / "contest.journal"
    cold = Conditions(1, 2, -1234, 5000, 7_030_000)
    write(path, STRETCH, Block([Timed(cold, np.array([START_US]))], START_US))
    with Journal(path) as book:
        assert [one.item for one in book.items()] == [cold]


@pytest.mark.parametrize(("table", "column"), [("stretch", "bridge_file"), ("stretch", "nameplate"), ("mark", "value")])
def test_changed_stretch_or_mark_is_left_out_and_told(journal, table, column):
    """A calibration or a mark that was changed is not used, and the reader says so."""
    write(journal, Mark("frequency", START_US, "", 7.03e6))
    change(journal, f"UPDATE {table} SET {column} = 5 WHERE id = 1")
    with Journal(journal) as book:
        assert len(book.stretches) + len(book.marks) == 1
        assert book.faults == [f"{table} 1 does not agree with its CRC-32 and is left out"]
