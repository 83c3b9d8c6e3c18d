"""Long work without a browser: its share done, its order, what stops it and what is then set back."""

import asyncio

import pytest

from lagscape.app.long_work import LongWork
from lagscape.app.page_link import PageLink


def steps(n, answer="done", seen=None):
    try:
        for i in range(1, n + 1):
            yield i, n
    finally:
        if seen is not None:
            seen.append("closed")
    return answer


def shares(page):
    return [payload["share"] for name, payload in page.sent if name == "progress" and payload["title"]]


def words(done, total):
    return f"{done} of {total}"


def test_the_share_counts_parts_by_their_weight_and_never_goes_back():
    page = PageLink()
    place = LongWork(page)

    async def job():
        with place.begin("Opening", {"first": 1.0, "second": 3.0}) as work:
            assert await work.through("first", words, steps(2)) == "done"
            assert shares(page)[-1] == pytest.approx(0.25)
            work.tell("second", "half", 0.5)
            work.tell("second", "half", 1.0)
            work.tell("first", "again", 0.0)

    place.start(job())
    # By hand: 1 of 4 seconds, then 3 more.
    assert shares(page)[-1] == 1.0 and shares(page) == sorted(shares(page))
    assert page.sent[-1] == ("progress", {"title": "", "words": "", "share": 1.0})


def test_a_stop_sets_back_closes_the_steps_and_says_nothing_more():
    page, state, seen = PageLink(), {"value": "before"}, []
    place = LongWork(page)

    async def job():
        with place.begin("Opening", {"part": 1.0}, lambda: state.update(value="before")) as work:
            state["value"] = "half done"
            page.receive("stop_work")
            assert state["value"] == "before"
            await work.through("part", words, steps(3, seen=seen))
            state["value"] = "finished"

    place.start(job())
    assert state["value"] == "before" and seen == [] and shares(page) == []
    assert page.sent[-1][1]["title"] == ""


def test_newer_work_takes_the_place_of_older_which_then_ends_in_silence():
    page, ended = PageLink(), []
    place = LongWork(page)

    async def job(name, n):
        with place.begin(name, {"part": 1.0}) as work:
            for share in range(n):
                work.tell("part", name, share / n)
                await work.answer_page(now=True)
            ended.append(name)

    async def both():
        older = asyncio.create_task(job("older", 50))
        await asyncio.sleep(0)
        await job("newer", 3)
        await older

    asyncio.run(both())
    titles = [payload["title"] for name, payload in page.sent if name == "progress"]
    assert ended == ["newer"] and titles[0] == "older" and titles[-2:] == ["newer", ""]
    assert "older" not in titles[titles.index("newer") :]


def test_what_goes_wrong_in_a_step_comes_out_and_the_bar_goes():
    page = PageLink()
    place = LongWork(page)

    def broken():
        yield 1, 2
        raise ValueError("no such thing")

    async def job():
        with place.begin("Opening", {"part": 1.0}) as work:
            await work.through("part", words, broken())

    with pytest.raises(ValueError, match="no such thing"):
        place.start(job())
    assert page.sent[-1][1]["title"] == ""
