"""What an access token takes away from its person: writing, other projects, and handing out more access."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from kinetics_db.errors import NotPermitted

if TYPE_CHECKING:
    from kinetics_db.accounts.models import User

Scope = Literal["read", "write"]
SCOPES: tuple[str, ...] = Scope.__args__  # type: ignore[attr-defined]


@dataclass(frozen=True)
class Limits:
    """Limits of the token that a request came with; a signed-in person has none.

    ``project_id`` is the only project that the token opens, None for all of the person's. ``token`` is its name.
    """

    scope: Scope
    project_id: int | None = None
    token: str = ""

    @property
    def may_write(self) -> bool:
        """Whether the token's scope lets it write."""
        return self.scope == "write"

    def covers(self, project_id: int) -> bool:
        """Whether the token opens that project."""
        return self.project_id is None or self.project_id == project_id


def require_no_token(user: User, *, what: str) -> None:
    """NotPermitted when the person acts through a token: access is handed out and changed by people only."""
    if user.limits is not None:
        raise NotPermitted(f"{what} needs a person who has logged in; a token cannot do it")
