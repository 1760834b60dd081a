"""What an open window knows of its recording under the plan and the marks of this moment."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import basis_of, fit
from pulsemend.engine.setup import Setup
from pulsemend.mending.channel_evidence import ChannelEvidence, channel_evidence
from pulsemend.mending.prepare import Decision, bind_checked, decide
from pulsemend.mending.study_log import read_study_log
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Recording
from pulsemend.progress import Work


@dataclass(frozen=True)
class Learned:
    """Result of learning; previews and the lists of stages rest on it.

    Parameters
    ----------
    plan : Plan
    marks : Marks
    setup : Setup
    estimates : Estimates
    decision : Decision
    warnings : tuple of str
    """

    plan: Plan
    marks: Marks
    setup: Setup
    estimates: Estimates
    decision: Decision
    warnings: tuple[str, ...]

    @property
    def against(self) -> dict[str, ChannelEvidence]:
        """What speaks against channels, by name."""
        return channel_evidence(self.setup, self.estimates)

    def chain(self, recording: Recording) -> Chain:
        """Build the chain on a recording that the caller alone reads."""
        return Chain(recording, self.setup, self.estimates)


def learn(recording: Recording, plan: Plan, marks: Marks, earlier: Learned | None = None) -> Work[Learned]:
    """Bind, fit and decide; estimates that rest on the same settings are taken over.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    plan, marks : Plan, Marks
        As they are edited.
    earlier : Learned or None
        What was known of the same recording before.

    Yields
    ------
    Progress

    Returns
    -------
    Learned

    Raises
    ------
    InputError
        Plan, marks and recording do not go together.
    """
    setup, warnings = bind_checked(recording.facts, plan, marks)
    if earlier is not None and earlier.estimates.rests_on == basis_of(setup):
        estimates = earlier.estimates
    else:
        estimates = yield from fit(recording, setup)
    decision = decide(setup, estimates, plan, marks, read_study_log(recording, plan, marks))
    return Learned(plan, marks, setup, estimates, decision, (*warnings, *decision.warnings))


def repaired_stored(chain: Chain, estimates: Estimates, start: int, stop: int) -> NDArray[Any]:
    """Repaired samples of a stretch, offsets included, across breaks.

    Parameters
    ----------
    chain : Chain
        From `Learned.chain`.
    estimates : Estimates
        The same the chain was made with.
    start, stop : int
        Recorded samples.

    Returns
    -------
    float32 array, shape (stop - start, n_used)
        Stored units.
    """
    setup = chain.setup
    pieces = []
    for lo, hi in setup.facts.segments:
        a, b = max(lo, start), min(hi, stop)
        if a < b:
            pieces.append(chain.repaired(a, b).astype(np.float32))
    stored = np.concatenate(pieces) if len(pieces) > 1 else pieces[0]
    if setup.removes_offset:
        stored += estimates.offset.astype(np.float32)
    return stored
