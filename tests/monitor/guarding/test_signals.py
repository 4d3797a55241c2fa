"""Signals are noted, and obeyed where it is safe."""

from __future__ import annotations

import signal
import threading
import time

import pytest

from monitor.guarding.signals import Interrupted, Signals


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_noted_outside(number: signal.Signals) -> None:
    """What is under way is finished; the number is there to be looked at."""
    before = signal.getsignal(number)
    with Signals() as signals:
        assert signals.caught is None
        signal.raise_signal(number)
        assert signals.caught == number
    assert signal.getsignal(number) is before


def test_waiting_ends_at_once() -> None:
    """A sleep inside `interruptible` is cut short."""
    with Signals() as signals:
        start = time.monotonic()
        alarm = threading.Timer(0.1, signal.pthread_kill, (threading.get_ident(), signal.SIGTERM))
        alarm.start()
        with pytest.raises(Interrupted), signals.interruptible():
            time.sleep(30.0)
        alarm.join()
        assert time.monotonic() - start < 10.0
        assert signals.caught == signal.SIGTERM


def test_what_is_under_way_is_left_after_a_while(monkeypatch: pytest.MonkeyPatch) -> None:
    """Not before a signal, not at once, but some seconds after the first signal."""
    now = 100.0
    monkeypatch.setattr("monitor.guarding.signals.time.monotonic", lambda: now)
    with Signals() as signals:
        signals.hurry()
        signal.raise_signal(signal.SIGTERM)
        now += 9.0
        signals.hurry()
        signal.raise_signal(signal.SIGHUP)
        now += 2.0
        with pytest.raises(Interrupted):
            signals.hurry()


def test_not_entered_after_a_signal() -> None:
    """Nothing new is begun."""
    with Signals() as signals:
        signal.raise_signal(signal.SIGHUP)
        with pytest.raises(Interrupted), signals.interruptible():
            pytest.fail("entered")


def test_nohup_is_respected() -> None:
    """A hang-up that was ignored at the start stays ignored."""
    before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        with Signals() as signals:
            signal.raise_signal(signal.SIGHUP)
            assert signals.caught is None
    finally:
        signal.signal(signal.SIGHUP, before)


def test_the_first_signal_counts() -> None:
    """The exit status names the signal that ended guard."""
    with Signals() as signals:
        signal.raise_signal(signal.SIGTERM)
        signal.raise_signal(signal.SIGHUP)
        assert signals.caught == signal.SIGTERM
