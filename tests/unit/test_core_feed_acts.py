"""Acts that leave nothing to write are answered all the same, and at once: no sync follows that could do it."""

from __future__ import annotations

from helpers_feed import Shell, patient
from strandline.core.effects import Answer


def test_a_drain_of_nothing_is_answered_without_a_sync() -> None:
    shell = Shell(patient())
    for token in (100, 101):
        effects = shell.feed.drain(1_000, token)
        assert effects == [Answer(token, None)]
        shell.do(effects)


def test_it_waits_for_what_was_recorded_before_it() -> None:
    shell = Shell(patient(), synchronous=False)
    shell.sync()
    shell.events([5], 1_000)
    token = shell.act("drain", now_ns=1_001)
    again = shell.act("drain", now_ns=1_002)
    assert not shell.answers
    shell.sync()
    assert set(shell.answers) >= {token, again}
    last = shell.act("drain", now_ns=1_003)
    assert last in shell.answers
