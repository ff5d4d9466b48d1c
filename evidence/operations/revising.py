"""What all revising operations share: nobody overwrites what they have not seen, and nothing changes into itself."""

from collections.abc import Mapping
from typing import Any
from uuid import UUID

from evidence.errors import Conflict, Invalid
from evidence.models.revisions import Revision


def check_seen(current: Revision, seen: UUID | None) -> None:
    """Refuse a change that was written against a revision which is no longer the current one."""
    if seen is not None and seen != current.pk:
        raise Conflict(
            "This was changed by someone else in the meantime. Read it again, then decide.", code="changed-meanwhile"
        )


def only_changed(before: Mapping[str, Any], after: Mapping[str, Any]) -> dict[str, Any]:
    """The facts that differ; a revision equal to its predecessor would be noise in the history."""
    changed = {name: value for name, value in after.items() if before[name] != value}
    if not changed:
        raise Invalid.field("", "nothing-changed", "Nothing would change: the register says this already.")
    return changed
