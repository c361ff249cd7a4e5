"""Runs a worker of one lane: ``python -m labmon.worker prompt`` or ``python -m labmon.worker long``.

Judging and telling must never wait behind rolling up a day, writing evidence or a back-test, so they have workers of their own.
"""

import argparse
import os
import socket
import sys

from labmon.celery import app
from labmon.pipeline.lanes import Lane, queue_of

#: What takes long gives way to whoever judges or answers on the same machine.
NICENESS = {Lane.PROMPT: 0, Lane.LONG: 5}
PING_WITHIN_S = 5.0


def main() -> None:
    """Command entry."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("lane", type=Lane, choices=list(Lane))
    parser.add_argument("--concurrency", type=int, default=2)
    parser.add_argument("--log-level", default="INFO")
    parser.add_argument("--ping", action="store_true", help="only ask this machine's worker of the lane whether it answers")
    wish = parser.parse_args()
    name = f"{wish.lane}@{socket.gethostname()}"
    if wish.ping:
        sys.exit(0 if app.control.ping(destination=[name], timeout=PING_WITHIN_S) else f"{name} does not answer")
    os.nice(NICENESS[wish.lane])
    app.worker_main(["worker", "--queues", queue_of(wish.lane), "--hostname", name, "--concurrency", str(wish.concurrency),
                     "--loglevel", wish.log_level, "--without-gossip", "--without-mingle"])


if __name__ == "__main__":
    main()
