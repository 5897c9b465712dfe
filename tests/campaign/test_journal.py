"""Workers write journals; whoever follows them sees every whole, undamaged event once."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from charflow.campaign.journal import SUFFIX, Follower, Journal
from charflow.errors import FolderError


@pytest.fixture
def journal(tmp_path: Path) -> Iterator[Journal]:
    with closing(Journal(tmp_path)) as opened:
        yield opened


def events(follower: Follower) -> list[dict[str, object]]:
    return [event for _, event in follower.new()]


def path_of(folder: Path) -> Path:
    return folder / f"{os.getpid()}{SUFFIX}"


def test_events_are_seen_once_in_order_and_with_their_process(tmp_path: Path, journal: Journal) -> None:
    follower = Follower(tmp_path)
    journal.write(job="a")
    journal.write(begin="k")
    assert list(follower.new()) == [(os.getpid(), {"job": "a"}), (os.getpid(), {"begin": "k"})]
    journal.write(done="a")
    assert events(follower) == [{"done": "a"}]
    assert events(follower) == []


def test_after_again_every_event_is_seen_once_more(tmp_path: Path, journal: Journal) -> None:
    follower = Follower(tmp_path)
    journal.write(job="a")
    assert events(follower) == [{"job": "a"}]
    follower.again()
    assert events(follower) == [{"job": "a"}]


def test_a_line_that_is_still_being_written_is_seen_when_it_is_whole(
    tmp_path: Path, journal: Journal
) -> None:
    journal.write(key="k", value=[1.5, None])
    whole = path_of(tmp_path).read_bytes()
    for cut in (1, len(whole) // 2, len(whole) - 1):
        path_of(tmp_path).write_bytes(whole[:cut])
        follower = Follower(tmp_path)
        assert events(follower) == []
        path_of(tmp_path).write_bytes(whole)
        assert events(follower) == [{"key": "k", "value": [1.5, None]}]


@given(data=st.data())
def test_a_damaged_line_is_passed_over_and_the_others_are_not(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    folder = tmp_path_factory.mktemp("journal")
    with closing(Journal(folder)) as journal:
        for number in range(3):
            journal.write(key=str(number), value=1.25 * number)
    whole = path_of(folder).read_bytes()
    place = data.draw(st.integers(0, len(whole) - 1), label="place")
    byte = data.draw(st.integers(0, 255).filter(lambda byte: byte not in (whole[place], 10)), label="byte")
    path_of(folder).write_bytes(whole[:place] + bytes([byte]) + whole[place + 1 :])
    hit = whole[:place].count(b"\n")
    lost = {hit, hit + 1} if whole[place] == 10 else {hit}  # without a line's end the next one is no line
    expected = [{"key": str(n), "value": 1.25 * n} for n in range(3) if n not in lost]
    assert events(Follower(folder)) == expected


@given(junk=st.binary(max_size=300))
def test_junk_is_no_event(tmp_path_factory: pytest.TempPathFactory, junk: bytes) -> None:
    folder = tmp_path_factory.mktemp("journal")
    path_of(folder).write_bytes(junk + b"\n")
    with closing(Journal(folder)) as journal:
        journal.write(key="sound")
    assert events(Follower(folder)) == [{"key": "sound"}]


def test_files_that_are_no_journals_are_left_alone(tmp_path: Path) -> None:
    (tmp_path / f"notes{SUFFIX}").write_text("mine\n")
    follower = Follower(tmp_path)
    assert events(follower) == []
    follower.remove()
    assert (tmp_path / f"notes{SUFFIX}").read_text() == "mine\n"


def test_the_follower_knows_which_process_is_at_which_trial_of_which_job(
    tmp_path: Path, journal: Journal
) -> None:
    follower = Follower(tmp_path)
    steps = [
        ({"job": "row 1"}, {os.getpid(): ("row 1", "")}),
        ({"begin": "k1"}, {os.getpid(): ("row 1", "k1")}),
        ({"key": "k1"}, {os.getpid(): ("row 1", "")}),
        ({"done": "row 1"}, {}),
    ]
    for event, busy in steps:
        journal.write(**event)
        assert len(events(follower)) == 1
        assert follower.busy == busy


def test_removing_takes_the_journals_and_what_killed_workers_left(tmp_path: Path, journal: Journal) -> None:
    journal.write(job="a")
    (tmp_path / "charflow-left").mkdir()
    (tmp_path / "charflow-left" / "bsim4.out").touch()
    Follower(tmp_path).remove()
    assert list(tmp_path.iterdir()) == []


def test_a_full_disk_is_reported_as_such(tmp_path: Path) -> None:
    if not Path("/dev/full").exists():
        pytest.skip("this system has no /dev/full")
    path_of(tmp_path).symlink_to("/dev/full")
    with (
        closing(Journal(tmp_path)) as journal,
        pytest.raises(FolderError, match=r"No space left on device\n.*go on"),
    ):
        journal.write(job="a")
