"""What a request for a token, or a login, has to say."""

from rest_framework import serializers

from labplan.base.fields import StrictSerializer
from labplan.base.models import ApiTokenScope
from labplan.base.tokens import DEFAULT_DAYS

MOST_DAYS = 366
SCOPE_HELP = "What it may do: `read` only looks, `write` does all that you may."


class TokenSerializer(StrictSerializer):
    """A new token of your own."""

    name = serializers.RegexField(
        r"^[^\x00-\x1f\x7f]+$", max_length=60,
        help_text="What it is for, in your words; no control characters.",
    )  # fmt: skip
    scope = serializers.ChoiceField(ApiTokenScope.values, default="write", help_text=SCOPE_HELP)
    days = serializers.IntegerField(
        min_value=1, max_value=MOST_DAYS, default=DEFAULT_DAYS,
        help_text="How many days it lives.",
    )  # fmt: skip


class LoginSerializer(StrictSerializer):
    """Code and password."""

    person = serializers.CharField(max_length=24, help_text="Your code.")
    password = serializers.CharField(
        max_length=128, trim_whitespace=False, help_text="Your password."
    )
    scope = serializers.ChoiceField(ApiTokenScope.values, default="write", help_text=SCOPE_HELP)
