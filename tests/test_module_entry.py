"""The program is there as a module too, for an environment whose scripts are not on the path."""

import subprocess
import sys


def test_the_package_runs_as_a_module():
    done = subprocess.run([sys.executable, "-m", "wakeledger", "--version"], capture_output=True, text=True, check=True)
    assert done.stdout.startswith("wakeledger ")
    wrong = subprocess.run([sys.executable, "-m", "wakeledger", "reduce", "none.toml"], capture_output=True, text=True)
    assert wrong.returncode == 2
    assert wrong.stderr.startswith("wakeledger: none.toml")
