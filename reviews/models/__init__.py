"""The records of the reviews layer."""

from reviews.models.interpretations import (
    Agrees,
    Claim,
    ClaimKind,
    ClaimStatus,
    Conclusion,
    Decision,
    Interpretation,
    InterpretationVersion,
    Judgement,
    MustSeePoint,
    ReviewRead,
    Verdict,
    Withdrawal,
)

__all__ = [
    "Agrees",
    "Claim",
    "ClaimKind",
    "ClaimStatus",
    "Conclusion",
    "Decision",
    "Interpretation",
    "InterpretationVersion",
    "Judgement",
    "MustSeePoint",
    "ReviewRead",
    "Verdict",
    "Withdrawal",
]
