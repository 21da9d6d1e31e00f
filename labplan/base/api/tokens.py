"""`/tokens/` and `/login/`: a person's own tokens, and how to get one for a password."""

from typing import Any

from django.db.models import QuerySet
from rest_framework.response import Response

from labplan.base import login, tokens
from labplan.base.api import schema
from labplan.base.api.token_bodies import LoginSerializer, TokenSerializer
from labplan.base.models import ApiToken
from labplan.base.rights import require
from labplan.base.views import ListView, LookView

# A token's text must not lie in any cache; for the same reason its POST takes no key: the answer
# to a request with a key is stored.
NOT_STORED = {"Cache-Control": "no-store"}


def show_token(token: ApiToken, *, current_id: int | None) -> dict[str, Any]:
    return {
        "id": token.pk,
        "name": token.name,
        "scope": token.scope,
        "created_at": token.created_at.isoformat(),
        "expires_at": token.expires_at.isoformat(),
        "last_used_at": token.last_used_at.isoformat() if token.last_used_at else None,
        "revoked_at": token.revoked_at.isoformat() if token.revoked_at else None,
        "is_current": token.pk == current_id,
    }


@schema.token_list
class TokenList(ListView):
    def rows(self, request: Any, wanted: dict[str, str], **kwargs: Any) -> QuerySet[ApiToken]:
        self.current_id = request.user.token_id
        return tokens.list_own_tokens(actor=request.user)

    def show(self, row: ApiToken) -> dict[str, Any]:
        return show_token(row, current_id=self.current_id)

    def post(self, request: Any) -> Response:
        require(request.user, "token.make")
        values = TokenSerializer(data=request.data).read()
        return _with_text(tokens.make_own_token(actor=request.user, **values), request)


@schema.token_revoke
class TokenRevoke(LookView):
    def post(self, request: Any, token_id: int) -> Response:
        token = tokens.revoke_own_token(actor=request.user, token_id=token_id)
        return Response(show_token(token, current_id=request.user.token_id))


@schema.login
class Login(LookView):
    """For everybody: it is where a token comes from."""

    authentication_classes = ()
    permission_classes = ()

    def post(self, request: Any) -> Response:
        values = LoginSerializer(data=request.data).read()
        address = login.address_of(
            request.META.get("REMOTE_ADDR", ""), request.headers.get("X-Forwarded-For", "")
        )
        new = login.log_in(
            person_code=values["person"], password=values["password"], address=address,
            scope=values["scope"],
        )  # fmt: skip
        return _with_text(new, request)


def _with_text(new: tokens.NewToken, request: Any) -> Response:
    current = getattr(request.user, "token_id", None)
    body = {**show_token(new.row, current_id=current), "token": new.text}
    return Response(body, status=201, headers=NOT_STORED)
