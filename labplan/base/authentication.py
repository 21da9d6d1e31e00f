"""`Authorization: Bearer <token>` -> request.user is an Actor."""

from typing import Any

from rest_framework import exceptions
from rest_framework.authentication import BaseAuthentication, get_authorization_header
from rest_framework.permissions import BasePermission

from labplan.base import tokens
from labplan.base.rights import Actor


class BearerTokenAuthentication(BaseAuthentication):
    def authenticate(self, request: Any) -> tuple[Actor, None] | None:
        parts = get_authorization_header(request).split()
        if not parts:
            return None
        if len(parts) != 2 or parts[0].lower() != b"bearer":
            raise exceptions.AuthenticationFailed(
                "Send the token as 'Authorization: Bearer <token>'."
            )
        actor = tokens.find_actor(parts[1].decode("ascii", "replace"))
        if actor is None:
            raise exceptions.AuthenticationFailed(
                "The token is unknown, expired or revoked; "
                "make a new one with 'manage.py create_token'."
            )
        return actor, None

    def authenticate_header(self, request: Any) -> str:
        return 'Bearer realm="labplan"'


class HasActor(BasePermission):
    message = "Send a token as 'Authorization: Bearer <token>'."

    def has_permission(self, request: Any, view: Any) -> bool:
        return isinstance(request.user, Actor)
