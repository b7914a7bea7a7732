import os
import subprocess
import sys
import textwrap
import time
from datetime import UTC, datetime

import pytest

from qa.errors import FaultError
from qa.store import run_lock

NOW = datetime(2026, 3, 2, 8, 30, tzinfo=UTC)


def test_a_second_run_is_told_who_is_at_work(tmp_path):
    with run_lock(tmp_path, NOW):
        with pytest.raises(FaultError) as caught, run_lock(tmp_path, NOW):
            pass
        said = str(caught.value)
    assert f"process {os.getpid()}" in said
    assert "since 2026-03-02T08:30:00+00:00" in said
    assert str(tmp_path) in said
    with run_lock(tmp_path, NOW):
        pass


def test_a_run_that_was_killed_leaves_no_lock(tmp_path):
    code = f"""
        import os, pathlib, time
        from datetime import datetime, UTC
        from qa.store.lock import run_lock
        with run_lock(pathlib.Path({str(tmp_path)!r}), datetime.now(UTC)):
            print("held", flush=True)
            time.sleep(60)
    """
    running = subprocess.Popen([sys.executable, "-c", textwrap.dedent(code)], stdout=subprocess.PIPE)
    assert running.stdout.readline() == b"held\n"
    with pytest.raises(FaultError, match=f"process {running.pid}"), run_lock(tmp_path, NOW):
        pass
    running.kill()
    running.communicate()
    with run_lock(tmp_path, NOW):
        pass


def test_a_run_may_wait(tmp_path):
    code = f"""
        import pathlib, time
        from datetime import datetime, UTC
        from qa.store.lock import run_lock
        with run_lock(pathlib.Path({str(tmp_path)!r}), datetime.now(UTC)):
            print("held", flush=True)
            time.sleep(0.5)
    """
    with subprocess.Popen([sys.executable, "-c", textwrap.dedent(code)], stdout=subprocess.PIPE) as running:
        assert running.stdout.readline() == b"held\n"
        start = time.monotonic()
        with run_lock(tmp_path, NOW, wait_s=30):
            assert time.monotonic() - start < 25


def test_a_block_that_fails_lets_go(tmp_path):
    with pytest.raises(ZeroDivisionError), run_lock(tmp_path, NOW):
        _ = 1 / 0
    with run_lock(tmp_path, NOW):
        pass


def test_a_folder_that_is_not_there(tmp_path):
    with pytest.raises(FaultError, match="cannot be opened"), run_lock(tmp_path / "nowhere", NOW):
        pass
