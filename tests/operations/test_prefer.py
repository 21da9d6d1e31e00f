"""How a wish to wait is read from Prefer, by RFC 7240."""

import pytest

from labplan.operations.waiting.prefer import wanted_wait_s, without_wait


@pytest.mark.parametrize(
    ("lines", "seconds"),
    [
        # section 2: several in one line, and over several lines
        (["respond-async, wait=100", "handling=lenient"], 10),
        (["respond-async, wait=100, handling=lenient"], 10),
        # section 4.3
        (["respond-async, wait=10"], 10),
        (["wait=10"], 10),
        # section 2: names are not case-sensitive, white space around "=" is bad but read
        (["WAIT=5"], 5),
        (["wait = 5"], 5),
        (["wait\t=\t5 ,respond-async"], 5),
        # a value may be quoted, and parameters may follow, empty ones too
        (['wait="5"'], 5),
        (['wait="\\5"'], 5),
        (["wait=5; because=slow"], 5),
        (['wait=5;;a=""; b ;'], 5),
        # what stands in quotes is no preference
        (['note="wait=1, wait=2", wait=3'], 3),
        (['note="a \\" wait=1, ", wait=3'], 3),
        # empty elements of a list are skipped
        ([", ,wait=4,"], 4),
        (["", "wait=4"], 4),
        # section 2: the first one counts
        (["wait=3, wait=7"], 3),
        (["wait=3", "wait=7"], 3),
        # whole seconds, 10 at most
        (["wait=0"], 0),
        (["wait=007"], 7),
        (["wait=11"], 10),
        (["wait=" + "9" * 5000], 10),
    ],
)
def test_a_wish_to_wait_is_read(lines: list[str], seconds: int) -> None:
    assert wanted_wait_s(lines) == seconds


@pytest.mark.parametrize(
    "lines",
    [
        [], [""], ["respond-async"], ["return=minimal; wait=5"], ["awaits=5"], ["wait"], ["wait="],
        ['wait=""'], ["wait=-1"], ["wait=+1"], ["wait=1.5"], ["wait=1e1"], ["wait=٣"], ["wait=5s"],
        ["wait=5 6"], ["wait==5"], ["wait: 5"], ['wait="5'], ['note="wait=5'], ["wait=5; a=b c"],
        ["wait=soon, wait=5"],
    ],
)  # fmt: skip
def test_without_a_readable_wish_nobody_waits(lines: list[str]) -> None:
    assert wanted_wait_s(lines) is None


@pytest.mark.parametrize(
    ("lines", "rest"),
    [
        (["wait=5"], []),
        (["respond-async, wait=100", "handling=lenient"], ["respond-async", "handling=lenient"]),
        (['Wait=5;a=b, return=minimal; x="a,b;c"'], ['return=minimal; x="a,b;c"']),
        (["wait=5, wait=6", "a, wait=7, b"], ["a, b"]),
    ],
)  # fmt: skip
def test_all_other_preferences_go_on_as_they_were(lines: list[str], rest: list[str]) -> None:
    assert list(without_wait(lines)) == rest


@pytest.mark.parametrize("sign", ['"', '\\"', ";", '"\\', ' ; "'])
def test_a_long_malformed_header_is_read_in_one_pass(sign: str) -> None:
    """It would take hours if signs were tried again and again."""
    assert wanted_wait_s([("a" + sign) * 2000 + "@"] * 100) is None
