"""Ctrl-C waits until it is asked for, once."""

from __future__ import annotations

import signal
import threading

import pytest

from hurstfit.engines.interrupts import interrupts_when_asked


def signals(reached: list[str], *, ask_between: bool) -> None:
    with interrupts_when_asked() as ask:
        ask()
        signal.raise_signal(signal.SIGINT)
        reached.append("after the first signal")
        if ask_between:
            ask()
            reached.append("after asking")
        signal.raise_signal(signal.SIGINT)
        reached.append("after the second signal")


@pytest.mark.parametrize("ask_between", [True, False], ids=["asked", "pressed again"])
def test_an_interrupt_waits_until_it_is_asked_for_or_comes_again(ask_between: bool) -> None:
    reached: list[str] = []
    with pytest.raises(KeyboardInterrupt):
        signals(reached, ask_between=ask_between)
    assert reached == ["after the first signal"]


@pytest.mark.parametrize("fail", [False, True])
def test_ctrl_c_means_the_same_afterwards(fail: bool) -> None:
    before = signal.getsignal(signal.SIGINT)
    try:
        with interrupts_when_asked():
            assert signal.getsignal(signal.SIGINT) is not before
            if fail:
                raise ZeroDivisionError
    except ZeroDivisionError:
        pass
    assert signal.getsignal(signal.SIGINT) is before


def test_a_handler_of_the_users_is_left_alone() -> None:
    seen = []
    before = signal.signal(signal.SIGINT, lambda *_: seen.append("theirs"))
    try:
        with interrupts_when_asked() as ask:
            signal.raise_signal(signal.SIGINT)
            ask()
    finally:
        signal.signal(signal.SIGINT, before)
    assert seen == ["theirs"]


def test_other_threads_can_use_it_too() -> None:
    done = []

    def work() -> None:
        with interrupts_when_asked() as ask:
            ask()
            done.append(True)

    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert done == [True]
