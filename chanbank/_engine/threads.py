"""Threads over independent jobs, each thread with buffers and a plan of its own."""

import os
from concurrent.futures import ThreadPoolExecutor

__all__ = ["Crew"]


class Crew:
    """As many members as workers; `run` deals the jobs out and waits for all of them."""

    def __init__(self, make_member, workers):
        self.members = [make_member() for _ in range(workers)]
        self._pool = self._process = None

    def run(self, work, jobs):
        """Call work(member, its jobs) for every member, on threads where that pays."""
        if len(self.members) == 1 or len(jobs) < 2:
            work(self.members[0], jobs)
            return
        if self._process != os.getpid():  # a forked child has none of its parent's threads
            self._pool, self._process = ThreadPoolExecutor(len(self.members)), os.getpid()
        step = len(self.members)
        list(self._pool.map(work, self.members, [jobs[first::step] for first in range(step)]))
