"""The binding between Python and Qt keeps the reference counts of the constants it returns.

Release 6.12.0 of the binding loses a reference to None on every call that returns it; under Python 3.11 the
process is aborted as soon as none is left, within minutes of a running window. The calls are few enough that
such a release fails here instead of aborting.
"""

from __future__ import annotations

import sys

import pytest
from PySide6.QtCore import QObject

CALLS = 1000
BOUND = 100
"""Far above what other code does to the counts meanwhile, far below one reference per call."""

immortal = pytest.mark.skipif(
    sys.version_info >= (3, 12), reason="None, True and False are immortal from Python 3.12 on"
)


@immortal
def test_calls_returning_none_keep_its_references() -> None:
    thing = QObject()
    before = sys.getrefcount(None)
    for _ in range(CALLS):
        thing.setObjectName("x")
    assert abs(sys.getrefcount(None) - before) < BOUND


@immortal
def test_signals_keep_the_references_of_none() -> None:
    thing = QObject()
    thing.objectNameChanged.connect(lambda _name: None)
    before = sys.getrefcount(None)
    for number in range(CALLS):
        thing.setObjectName(str(number % 2))
    assert abs(sys.getrefcount(None) - before) < BOUND


@immortal
@pytest.mark.parametrize("answer", [True, False])
def test_calls_returning_a_truth_value_keep_its_references(answer: bool) -> None:
    thing = QObject()
    thing.blockSignals(answer)
    before = sys.getrefcount(answer)
    for _ in range(CALLS):
        thing.signalsBlocked()
    assert abs(sys.getrefcount(answer) - before) < BOUND
