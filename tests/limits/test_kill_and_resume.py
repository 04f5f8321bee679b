import json
import os
import subprocess
import sys

import pytest


@pytest.mark.slow
def test_a_killed_process_resumes_to_the_same_numbers():
    done = subprocess.run(
        [sys.executable, "-m", "tests.limits.kill_and_resume", "--kills", "10"],
        capture_output=True,
        text=True,
        timeout=600,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
    )
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stdout.splitlines()[-1])
    for name in ("sampling", "injection"):
        assert told[name]["same"], told
        assert told[name]["kills"] >= 2, told
        assert told[name]["sizes"] == sorted(told[name]["sizes"]), told
