"""The tables of the register, by subject.

``people`` (persons, members, tokens), ``bases`` (evidence bases and their changes), ``revisions`` (the shared shape of
facts that hold from one change to another), ``papers``, ``estimates``, ``questions``.
"""

from .bases import Change, EvidenceBase
from .estimates import Coding, Estimate, EstimateRevision, Resolution, ResolutionCoding
from .papers import Paper, PaperRevision, Study, StudyRevision
from .people import Membership, Person, SignInFailure, Token
from .questions import EligibilityRevision, Question, QuestionChange, QuestionRevision

__all__ = [
    "Change",
    "Coding",
    "EligibilityRevision",
    "Estimate",
    "EstimateRevision",
    "EvidenceBase",
    "Membership",
    "Paper",
    "PaperRevision",
    "Person",
    "Question",
    "QuestionChange",
    "QuestionRevision",
    "Resolution",
    "ResolutionCoding",
    "SignInFailure",
    "Study",
    "StudyRevision",
    "Token",
]
