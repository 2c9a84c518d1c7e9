"""Processes that record runs, to be killed or to get in each other's way."""

import multiprocessing
import random
import time
from datetime import timedelta

from book_factory import START, Clock, measurement, session
from store_base import HOW, block

from qa.intake.series import Held
from qa.store import open_book
from qa.words import Verdict

FORK = multiprocessing.get_context("fork")  # the libraries are loaded already: a child is at work within milliseconds


def work(url, scanner, weeks, tell=None, start=None):
    """What ingest does with the book, run by run; every step may be repeated. The clock stands still.

    `tell` is called with the week after each run that is new; `start` is a barrier to wait at.
    """
    if start is not None:
        start.wait(timeout=60)
    with open_book(url, clock=Clock()) as book:
        digest = book.note_limits([block()]).digest
        for week in range(weeks):
            one = session(scanner, "Plate A", START + timedelta(weeks=week), files=3)
            new = not book.has_run(one.run)
            generation = book.record(one, measurement(scanner, week, 4, evidence=True), only_new_files=True, **HOW)
            book.set_verdict(one.run, generation, Verdict.STEADY, ["all within limits"], digest)
            book.hold([Held(f"{scanner}/{week}.txt", "not-dicom", "no DICOM file")])
            if new and tell is not None:
                tell(week)


def _told_work(url, scanner, weeks, sender):
    work(url, scanner, weeks, sender.send)
    sender.close()


def kill_often(url, times, seed=11):
    """Yields after each time a child was killed: the first while it makes the book, the others at some run."""
    chance = random.Random(seed)
    for attempt in range(times):
        receiver, sender = FORK.Pipe(duplex=False)
        child = FORK.Process(target=_told_work, args=(url, "North bay", 10**6, sender))
        child.start()
        sender.close()
        for _ in range(0 if attempt == 0 else chance.randint(1, 4)):
            assert receiver.poll(60), "the child records nothing"
            receiver.recv()
        time.sleep(chance.uniform(0.0, 0.015))
        child.kill()
        child.join(timeout=60)
        assert child.exitcode == -9
        receiver.close()
        yield


def all_at_once(url, scanners, weeks):
    """One child per scanner named, all starting at once; gives their exit codes."""
    start = FORK.Barrier(len(scanners))
    children = [FORK.Process(target=work, args=(url, scanner, weeks, None, start)) for scanner in scanners]
    for child in children:
        child.start()
    for child in children:
        child.join(timeout=120)
    return [child.exitcode for child in children]
