"""The closed lists of the register: one place for codes, with the words shown beside them."""

from django.db.models import TextChoices

from evidence.readings.vocabulary import Metric


class Role(TextChoices):
    READER = "reader", "Reader"
    CODER = "coder", "Coder"
    REVIEWER = "reviewer", "Reviewer"
    STEWARD = "steward", "Steward"


class Scope(TextChoices):
    """What a token may do at most; each scope opens the actions of the role it is named after."""

    READ = "read", "Read everything in the evidence base"
    CODE = "code", "Add papers and file codings"
    REVIEW = "review", "Resolve codings, correct, retract and decide eligibility"
    STEWARD = "steward", "Questions, protocols, members and tokens"


class PaperKind(TextChoices):
    ARTICLE = "article", "Article"
    WORKING_PAPER = "working-paper", "Working paper"
    REPORT = "report", "Report"
    THESIS = "thesis", "Thesis"
    CHAPTER = "chapter", "Book chapter"
    OTHER = "other", "Other"


class Standing(TextChoices):
    CURRENT = "current", "Current"
    SUPERSEDED = "superseded", "Superseded by a later version"
    CORRECTED = "corrected", "Corrected"
    RETRACTED = "retracted", "Retracted"


# The scales on which effects are compared come with the readings, where each carries its explanation.
METRIC_CHOICES = [(metric.value, metric.replace("-", " ").capitalize()) for metric in Metric]


class Direction(TextChoices):
    HIGHER = "higher", "Higher is better"
    LOWER = "lower", "Lower is better"


class Decision(TextChoices):
    PROPOSED = "proposed", "Proposed, not decided yet"
    IN = "in", "Eligible"
    OUT = "out", "Not eligible"


class ResolutionKind(TextChoices):
    SINGLE = "single", "One coding"
    AGREED = "agreed", "Codings agreed"
    ADJUDICATED = "adjudicated", "Decided by a reviewer"


class Verb(TextChoices):
    """What a change did. The change log and the pages show the label."""

    BASE_CREATED = "evidence-base-created", "Evidence base created"
    MEMBER_SET = "member-set", "Member added or role changed"
    MEMBER_REMOVED = "member-removed", "Member removed"
    TOKEN_ISSUED = "token-issued", "Token issued"
    TOKEN_REVOKED = "token-revoked", "Token revoked"
    QUESTION_DEFINED = "question-defined", "Question defined"
    QUESTION_REVISED = "question-revised", "Question revised"
    PAPER_ADDED = "paper-added", "Paper added"
    PAPER_REVISED = "paper-revised", "Paper revised"
    PAPER_RETRACTED = "paper-retracted", "Paper retracted"
    STUDY_REVISED = "study-revised", "Study revised"
    CODING_FILED = "coding-filed", "Coding filed"
    ESTIMATE_CORRECTED = "estimate-corrected", "Estimate corrected"
    ELIGIBILITY_DECIDED = "eligibility-decided", "Eligibility decided"
    PROTOCOL_ADOPTED = "protocol-adopted", "Protocol adopted"
