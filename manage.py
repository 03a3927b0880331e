#!/usr/bin/env python3
"""Bandledger's one entrance: `python3 manage.py start`, `python3 manage.py test`, and every other command.

This file is also read by Pythons far too old for the rest, so it keeps to syntax that all of them know.
"""

import os
import sys


def refusal(version, system):
    """The one line that says why this Python or system cannot run Bandledger, or None."""
    if system == "nt":
        return (
            "Bandledger runs on Linux and macOS, not on Windows itself: use the Windows Subsystem for Linux "
            "and run the same command there."
        )
    if version < (3, 11):
        return (
            "Bandledger needs Python 3.11 or newer and this is Python %d.%d: install a newer one and name it, "
            "for example: python3.12 manage.py start" % (version[0], version[1])
        )
    return None


if __name__ == "__main__":
    problem = refusal(tuple(sys.version_info[:2]), os.name)
    if problem:
        sys.stderr.write(problem + "\n")
        sys.exit(2)
    from labsite import bootstrap

    sys.exit(bootstrap.main(sys.argv[1:]))
