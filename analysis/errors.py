"""What can go wrong in concluding; the tree's root is the register's, so the edges translate both alike.

EvidenceError (evidence.errors)
└── Conflict
    ├── ClaimLost        another worker holds the request now; nothing may be written
    └── NothingToRetry   the request did not fail
"""

from evidence.errors import Conflict


class ClaimLost(Conflict):
    code = "claim-lost"
    title = "Another worker took this over"


class NothingToRetry(Conflict):
    code = "nothing-to-retry"
    title = "There is nothing to run again"
