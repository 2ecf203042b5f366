"""One process a bench: a lock on the supply's resource that the operating system takes back when
its process ends, however it ends."""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from benchkit.errors import InputError


@contextmanager
def bench_lock(resource: str) -> Iterator[None]:
    """Hold the lock of a supply's VISA resource; InputError names the process that holds it.

    The lock is this machine's: two machines that can reach one supply are not kept apart. On a
    system without POSIX file locks there is none.
    """
    try:
        import fcntl
    except ImportError:  # no such lock here: the README says so
        yield
        return
    name = hashlib.sha256(resource.encode()).hexdigest()[:16]
    path = Path(tempfile.gettempdir()) / f"benchkit-{name}.lock"
    descriptor = os.open(path, os.O_RDWR | os.O_CREAT, 0o666)
    try:
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            holder = os.read(descriptor, 32).decode("ascii", "replace").strip() or "unknown"
            raise InputError(
                f"the supply at {resource} is in use by another benchkit (process {holder}): "
                "let it end, or stop it, before this bench is opened again"
            ) from None
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, f"{os.getpid()}\n".encode(), 0)
        yield
    finally:
        os.close(descriptor)
