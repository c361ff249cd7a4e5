"""Starts one program that dies with its parent; run as a script, so it knows the standard library only.

``python -I -S launch.py --parent PID --death-signal N --user same|namespace|UID:GID [--reach PATH] [-- PROGRAM ARG…]``

The death signal is asked for last: a change of user clears it, and one set on a starter does not reach what it starts.
"""

import argparse
import ctypes
import os
import signal
import sys

CLONE_NEWUSER = 0x10000000
PR_SET_PDEATHSIG = 1
NOBODY = 65534


def enter_namespace() -> None:
    """Become an ordinary user in a user namespace of our own; outside it files still belong to the real user."""
    libc = ctypes.CDLL(None, use_errno=True)
    user, group = os.geteuid(), os.getegid()
    if libc.unshare(CLONE_NEWUSER) != 0:
        raise OSError(ctypes.get_errno(), "unshare(CLONE_NEWUSER)")
    for name, line in (("setgroups", "deny"), ("uid_map", f"{NOBODY} {user} 1"), ("gid_map", f"{NOBODY} {group} 1")):
        with open(f"/proc/self/{name}", "w") as file:
            file.write(line)


def become(user: str) -> None:
    """Take on the user: ``same``, ``namespace`` or ``UID:GID``."""
    if user == "namespace":
        enter_namespace()
    elif user != "same":
        uid, gid = (int(number) for number in user.split(":"))
        os.setgroups([])
        os.setgid(gid)
        os.setuid(uid)


def die_with_parent(parent: int, death_signal: int) -> None:
    """Ask Linux for a signal when the parent is gone; elsewhere the next start finds what was left over."""
    if not sys.platform.startswith("linux"):
        return
    ctypes.CDLL(None).prctl(PR_SET_PDEATHSIG, death_signal, 0, 0, 0)
    if os.getppid() != parent:
        sys.exit("the parent was gone before the start")


def main() -> None:
    """Change user, ask for the death signal, become the program (or only tell whether a path can be reached)."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--parent", type=int, required=True)
    parser.add_argument("--death-signal", type=int, default=signal.SIGTERM)
    parser.add_argument("--user", default="same")
    parser.add_argument("--reach")
    parser.add_argument("program", nargs="*")
    wish = parser.parse_args()
    become(wish.user)
    if wish.reach:
        sys.exit(0 if os.access(wish.reach, os.X_OK) else 3)
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGQUIT):
        signal.signal(number, signal.SIG_DFL)
    die_with_parent(wish.parent, wish.death_signal)
    os.execvp(wish.program[0], wish.program)


if __name__ == "__main__":
    main()
