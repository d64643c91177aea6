"""A PostgreSQL server of the tests' own: a fresh cluster in a temporary folder, reached by a socket only."""

from __future__ import annotations

import contextlib
import os
import pwd
import shutil
import subprocess
import tempfile
import time
from pathlib import Path


def server_programs() -> Path | None:
    """Folder of initdb and postgres, the newest Debian version first; None where there is none."""
    debian = sorted(Path("/usr/lib/postgresql").glob("*/bin"), key=lambda p: -float(p.parent.name))
    on_path = [Path(found).parent] if (found := shutil.which("initdb")) else []
    return next((p for p in (*debian, *on_path) if (p / "initdb").is_file() and (p / "postgres").is_file()), None)


@contextlib.contextmanager
def running_server(programs: Path):
    """Start a server, and yield the folder of its socket; user ``maker``, no password, database ``postgres``."""
    # The server refuses to run as root.
    user = None
    if os.geteuid() == 0:
        names = {p.pw_name for p in pwd.getpwall()}
        user = pwd.getpwnam("postgres" if "postgres" in names else "nobody")
    folder = Path(tempfile.mkdtemp(prefix="pg-"))
    owner = {} if user is None else {"user": user.pw_uid, "group": user.pw_gid, "extra_groups": []}
    if user is not None:
        os.chown(folder, user.pw_uid, user.pw_gid)
    process = None
    environment = {"PATH": os.environ["PATH"], "LC_ALL": "C", "HOME": str(folder)}
    try:
        subprocess.run(
            [programs / "initdb", "-D", folder / "data", "-U", "maker", "-A", "trust", "-E", "UTF8", "--no-sync"],
            check=True, capture_output=True, env=environment, cwd=folder, **owner,
        )  # fmt: skip
        log = (folder / "log").open("wb")
        process = subprocess.Popen(
            [programs / "postgres", "-D", folder / "data", "-k", folder, "-c", "listen_addresses=", "-c", "fsync=off"],
            stdout=log, stderr=log, env=environment, cwd=folder, **owner,
        )  # fmt: skip
        for _ in range(300):
            if process.poll() is not None:
                raise RuntimeError((folder / "log").read_text("utf-8", "replace"))
            ready = subprocess.run([programs / "pg_isready", "-h", folder, "-q"], check=False, env=environment)
            if ready.returncode == 0:
                break
            time.sleep(0.1)
        else:
            raise RuntimeError("the server did not become ready: " + (folder / "log").read_text("utf-8", "replace"))
        yield folder
    finally:
        if process is not None:
            process.terminate()
            process.wait(timeout=60)
            log.close()
        shutil.rmtree(folder, ignore_errors=True)
