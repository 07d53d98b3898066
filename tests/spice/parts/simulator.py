"""Runs ngspice on one netlist and gives its measurements back."""

import re
import shutil
import subprocess
import tempfile
from pathlib import Path

MEASURED = re.compile(r"^([a-z][a-z0-9_]*)\s*=\s*([-+0-9.eE]+)", re.MULTILINE)


class SpiceError(Exception):
    """ngspice did not give what was asked for."""


def ensure_installed(say):
    """Install ngspice from the distribution when it is missing, and say so."""
    if shutil.which("ngspice"):
        return
    if not shutil.which("apt-get"):
        raise SpiceError("ngspice is missing and there is no apt-get: install ngspice by hand, then run this again")
    say("ngspice is missing: installing it with apt-get")
    command = ["apt-get", "install", "-y", "--no-install-recommends", "ngspice"]
    if subprocess.run(command, capture_output=True).returncode != 0:
        subprocess.run(["apt-get", "update"], capture_output=True)
        done = subprocess.run(command, capture_output=True, text=True)
        if done.returncode != 0:
            raise SpiceError(f"apt-get could not install ngspice: {done.stderr.strip()[-300:]}")


def measure(netlist, names):
    """Run `netlist` and return {name: value} for every name in `names`; a missing one is an error."""
    with tempfile.TemporaryDirectory(prefix="spice-") as directory:
        path = Path(directory) / "net.cir"
        path.write_text(netlist)
        try:
            done = subprocess.run(
                ["ngspice", "-b", path.name], cwd=directory, capture_output=True, text=True, timeout=60
            )
        except subprocess.TimeoutExpired as error:
            raise SpiceError(f"ngspice gave no answer in {error.timeout} s for: {netlist.splitlines()[0]}") from error
    found = {name: float(value) for name, value in MEASURED.findall(done.stdout)}
    missing = [name for name in names if name not in found]
    if missing:
        tail = (done.stdout + done.stderr).strip()[-600:]
        raise SpiceError(f"ngspice measured no {', '.join(missing)} for: {netlist.splitlines()[0]}\n{tail}")
    return {name: found[name] for name in names}
