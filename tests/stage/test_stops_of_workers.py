"""What the stops of a run with worker processes rest on."""

from __future__ import annotations

import signal
import threading

import pytest

from pipeline_filters.graph.workers import _signals_later


def test_a_stop_waits_and_then_comes():
    handler = signal.getsignal(signal.SIGINT)
    reached = []

    def stopped_while_starting():
        with _signals_later():
            signal.raise_signal(signal.SIGINT)
            reached.append(True)

    with pytest.raises(KeyboardInterrupt):
        stopped_while_starting()
    assert reached
    assert signal.getsignal(signal.SIGINT) is handler


def test_a_thread_beside_the_main_one_has_no_stops_to_wait_for():
    done = []

    def beside():
        with _signals_later():
            done.append(signal.getsignal(signal.SIGINT))

    thread = threading.Thread(target=beside)
    thread.start()
    thread.join()
    assert done == [signal.getsignal(signal.SIGINT)]
