"""Casework: a job's records joined with the arithmetic. Pure: records in, frozen answers out.

The daemon, the commands and the sheet all ask here. Nothing is read, written or timed.
"""

from __future__ import annotations

from store.balance.reuse import Candidate
from store.casework_answers import (
    ChannelOutlook,
    ChannelVerdict,
    CorrectionAdvice,
    ForceAdvice,
    LeftOut,
    PlaneAdvice,
    PlaneVerdict,
    TrialAdvice,
    UsedCoefficient,
    Verdict,
    VibrationVerdict,
)
from store.casework_correction import correction_for
from store.casework_judge import judge
from store.casework_trial import fit_force, label_questions, trial_advice

__all__ = [
    "Candidate",
    "ChannelOutlook",
    "ChannelVerdict",
    "CorrectionAdvice",
    "ForceAdvice",
    "LeftOut",
    "PlaneAdvice",
    "PlaneVerdict",
    "TrialAdvice",
    "UsedCoefficient",
    "Verdict",
    "VibrationVerdict",
    "correction_for",
    "fit_force",
    "judge",
    "label_questions",
    "trial_advice",
]
