"""The logbook keeps what it is given and says so when it cannot."""

from __future__ import annotations

from datetime import timedelta

import pytest
from record_maker import record_of

from ct_measure_plugin.errors import RecordError
from ct_measure_plugin.records import Logbook


def test_records_come_back_in_order(tmp_path):
    first, second = record_of("region_statistics")[0], record_of("region_statistics")[0]
    with Logbook(tmp_path / "book.sqlite") as book:
        assert book.add([first, second]) == 2
    with Logbook(tmp_path / "book.sqlite") as book:
        assert book.find() == (first, second)
        assert book.find(limit=1) == (second,)
        assert book.get(first.id) == first
        assert book.find(measurement="edge_mtf") == ()
        assert book.find(since=second.created) == (second,)
        assert book.find(until=first.created - timedelta(seconds=1)) == ()


def test_adding_twice_adds_nothing(tmp_path):
    first, second = record_of("region_statistics")[0], record_of("region_statistics")[0]
    with Logbook(tmp_path / "book.sqlite") as book:
        book.add(first)
        with pytest.raises(RecordError, match="took nothing"):
            book.add([second, first])
        assert book.find() == (first,)


def test_an_unknown_id_and_a_bad_place_say_so(tmp_path):
    with Logbook(tmp_path / "book.sqlite") as book, pytest.raises(RecordError, match="no record"):
        book.get("nothing")
    with pytest.raises(RecordError, match="cannot be opened"):
        Logbook(tmp_path / "no" / "such" / "folder" / "book.sqlite")
    with pytest.raises(RecordError, match="cannot be opened"):
        Logbook("nonsense://here")
