"""Answers made in threads: once for all who ask the same, bounded in number, kept within bounds; entity tags."""

import asyncio
import threading

import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.serve import work
from soundrose.serve.conditional import is_known, reduction_tag
from soundrose.serve.problems import Problem
from soundrose.serve.work import Answer, Workshop


class Bench:
    """Work that waits to be let go, and counts."""

    def __init__(self, size: int = 1) -> None:
        self.go, self.done, self.size = threading.Event(), 0, size

    def __call__(self) -> Answer:
        assert self.go.wait(20)
        self.done += 1
        return Answer(b"x" * self.size, "text/plain", {})


def test_those_who_ask_the_same_wait_for_one_work() -> None:
    async def ask() -> None:
        workshop, bench = Workshop(), Bench()
        asking = [asyncio.create_task(workshop.make("a", bench)) for _ in range(20)]
        await asyncio.sleep(0)
        asking[0].cancel()  # one client leaves: the others still get it
        bench.go.set()
        found = await asyncio.gather(*asking, return_exceptions=True)
        assert isinstance(found[0], asyncio.CancelledError)
        assert {answer.body for answer in found[1:] if isinstance(answer, Answer)} == {b"x"}
        await workshop.make("a", bench)
        assert bench.done == 1
        workshop.close()

    asyncio.run(ask())


def test_too_much_in_line_is_503_and_later_there_is_room(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(work, "WAITING", 3)

    async def ask() -> None:
        workshop, bench = Workshop(), Bench()
        asking = [asyncio.create_task(workshop.make(str(i), bench)) for i in range(3)]
        await asyncio.sleep(0)
        with pytest.raises(Problem, match="3 answers") as refused:
            await workshop.make("d", bench)
        assert (refused.value.status, refused.value.headers) == (503, {"Retry-After": "1"})
        bench.go.set()
        await asyncio.gather(*asking)
        assert (await workshop.make("d", bench)).body == b"x"
        workshop.close()

    asyncio.run(ask())


def test_work_that_fails_is_not_kept() -> None:
    async def ask() -> None:
        workshop, bench = Workshop(), Bench()
        bench.go.set()

        def fail() -> Answer:
            raise ValueError("no bin")

        for _ in range(2):
            with pytest.raises(ValueError, match="no bin"):
                await workshop.make("a", fail)
        assert (await workshop.make("a", bench)).body == b"x"
        workshop.close()

    asyncio.run(ask())


@pytest.mark.parametrize("bound", ["KEPT", "KEPT_BYTES"])
def test_what_is_kept_is_bounded_and_the_longest_unused_goes(monkeypatch: pytest.MonkeyPatch, bound: str) -> None:
    monkeypatch.setattr(work, bound, 3 if bound == "KEPT" else 3000)

    async def ask() -> None:
        workshop, bench = Workshop(), Bench(1000)
        bench.go.set()
        for key in ("a", "b", "c", "a", "d"):
            await workshop.make(key, bench)
        assert bench.done == 4
        await workshop.make("a", bench)  # asked for again in between, so still there
        assert bench.done == 4
        await workshop.make("b", bench)
        assert bench.done == 5
        workshop.close()

    asyncio.run(ask())


TAGS = st.text(st.characters(min_codepoint=0x21, max_codepoint=0x7E, exclude_characters='"'), max_size=20)


@given(TAGS, st.lists(st.tuples(st.booleans(), TAGS), max_size=5), st.lists(st.sampled_from(["", " ", "\t", " ,"])))
def test_tag_is_found_in_a_list_exactly_when_it_is_there(
    tag: str, others: list[tuple[bool, str]], gaps: list[str]
) -> None:
    line = ("".join(gaps) + ",").join(("W/" if weak else "") + f'"{other}"' for weak, other in others)
    assert is_known(f'"{tag}"', [line]) == (tag in [other for _, other in others])
    assert is_known(f'"{tag}"', [line, "*"])
    assert is_known(f'"{tag}"', [line, f'W/"{tag}"'])


@given(st.text(max_size=60))
def test_nonsense_is_no_tag(text: str) -> None:
    assert is_known('"0123456789abcdef-1-0123456789ab"', [text]) == (text.strip() == "*")


@given(st.lists(st.none() | st.floats(allow_nan=False) | st.integers() | st.sampled_from(["json", "png"]), max_size=6))
def test_reduction_tag_is_well_formed_and_steady(asked: list[object]) -> None:
    tag = reduction_tag("0123456789abcdef", 12, asked)
    assert tag.startswith('"0123456789abcdef-12-')
    assert tag == reduction_tag("0123456789abcdef", 12, asked)
    assert is_known(tag, [tag])
    assert tag != reduction_tag("0123456789abcdef", 12, [*asked, None])
