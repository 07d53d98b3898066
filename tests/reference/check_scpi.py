"""A meter that an independent SCPI client (PyVISA with PyVISA-py) understands is one that `ringvolt calibrate` understands.

The meter is played here, over TCP and over a pseudo-terminal. PyVISA-py asks it first, which proves that it is a proper
meter; then ringvolt asks it for the references of a whole guided calibration, and its journal must hold those values.
"""

import csv
import json
import os
import pty
import shutil
import socketserver
import subprocess
import sys
import tempfile
import threading
import time
import tty
from datetime import datetime, timedelta, timezone
from pathlib import Path

import pyvisa

ROOT = Path(__file__).resolve().parents[2]
RATIO = 1000.0
TARGETS = [0.0, 1100.0, 2200.0, 3300.0, 4400.0, 3300.0, 2200.0, 1100.0, 0.0]


class Meter:
    """Answers as a bench multimeter behind a 1000:1 probe does; every reading moves on to the next voltage."""

    def __init__(self):
        self.index = 0
        self.heard = []

    def answer(self, command):
        self.heard.append(command)
        if command == "*IDN?":
            return "Invented,Multimeter,0001,1.0\n"
        if command in ("MEAS:VOLT:DC?", "READ?"):
            volts = (TARGETS[self.index % len(TARGETS)] + 0.3) / RATIO
            self.index += 1
            return f"{volts:+.8E}\n"
        return ""


def serve_tcp(meter):
    class Handler(socketserver.StreamRequestHandler):
        def handle(self):
            for line in self.rfile:
                self.wfile.write(meter.answer(line.decode("ascii").rstrip("\r\n")).encode("ascii"))

    server = socketserver.ThreadingTCPServer(("127.0.0.1", 0), Handler)
    server.daemon_threads = True
    threading.Thread(target=server.serve_forever, daemon=True).start()
    return server.server_address[1]


def serve_pty(meter):
    far, near = pty.openpty()
    tty.setraw(far)
    tty.setraw(near)

    def serve():
        line = b""
        while True:
            try:
                line += os.read(far, 256)
            except OSError:
                return
            while b"\n" in line:
                command, line = line.split(b"\n", 1)
                os.write(far, meter.answer(command.decode("ascii").rstrip("\r")).encode("ascii"))

    threading.Thread(target=serve, daemon=True).start()
    # The near end stays open, so that the line does not hang up between two clients.
    return os.ttyname(near), near


def ask_with_pyvisa(resource):
    manager = pyvisa.ResourceManager("@py")
    instrument = manager.open_resource(resource, read_termination="\n", write_termination="\n", timeout=5000)
    try:
        identity = instrument.query("*IDN?").strip()
        volts = float(instrument.query("MEAS:VOLT:DC?"))
    finally:
        instrument.close()
        manager.close()
    assert identity == "Invented,Multimeter,0001,1.0", identity
    assert abs(volts - 0.3e-3) < 1e-9, volts


def codes(path):
    """Two readings a second; every step of the plan stands for 45 s."""
    time_utc = datetime(2026, 6, 1, 8, tzinfo=timezone.utc)
    with path.open("w", newline="") as file:
        table = csv.writer(file)
        table.writerow(["time_utc", "sense_code", "cross_code", "enclosure_celsius"])
        for step, volts in enumerate(TARGETS):
            for reading in range(90):
                time_utc += timedelta(seconds=0.5)
                noise = ((step * 90 + reading) * 7919 % 101) / 1000 - 0.05
                table.writerow([time_utc.strftime("%Y-%m-%dT%H:%M:%S.%fZ"), f"{(volts - 0.21) / 0.3125625 + noise:.3f}",
                                f"{(volts + 0.34) / 0.33 - noise:.3f}", "23.0"])


def calibrate(program, address, folder, extra=()):
    for name in ("bench.toml", "certificate.toml"):
        shutil.copy(ROOT / "host/examples" / name, folder)
    codes(folder / "codes.csv")
    done = subprocess.run(
        [program, "calibrate", "run", "--bench", "bench.toml", "--journal", "c.jsonl", "--codes", "codes.csv", "--highest", "4400",
         "--levels", "4", "--cycles", "1", "--simulated", "--operator", "check", "--reference", "invented meter",
         "--reference-u-ppm", "150", "--reference-u-volts", "0.2", "--meter", address, "--meter-ratio", str(RATIO),
         "--meter-readings", "1", "--meter-timeout", "5", "--out", "new.toml", *extra],
        cwd=folder, stdin=subprocess.DEVNULL, capture_output=True, text=True, timeout=120)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "Reference meter: Invented,Multimeter,0001,1.0." in done.stdout, done.stdout
    entries = [json.loads(line) for line in (folder / "c.jsonl").read_text().splitlines()]
    found = [entry["point"]["reference_volts"] for entry in entries if entry["entry"] == "point"]
    assert len(found) == len(TARGETS) and all(abs(volts - target - 0.3) < 1e-6 for volts, target in zip(found, TARGETS)), found


def main():
    program = sys.argv[1]
    started = time.monotonic()
    with tempfile.TemporaryDirectory() as folder:
        meter = Meter()
        port = serve_tcp(meter)
        ask_with_pyvisa(f"TCPIP::127.0.0.1::{port}::SOCKET")
        meter.index = 0
        calibrate(program, f"tcp:127.0.0.1:{port}", Path(folder))
        assert meter.heard.count("MEAS:VOLT:DC?") == 1 + len(TARGETS), meter.heard
    print("ok: PyVISA-py and ringvolt read the same meter over TCP, nine references of a guided calibration")
    with tempfile.TemporaryDirectory() as folder:
        meter = Meter()
        name, keep = serve_pty(meter)
        ask_with_pyvisa(f"ASRL{name}::INSTR")
        meter.index = 0
        calibrate(program, f"serial:{name}@9600", Path(folder), ["--meter-read"])
        assert meter.heard.count("READ?") == len(TARGETS), meter.heard
        os.close(keep)
    print("ok: the same over a serial line with READ?")
    print(f"info: {time.monotonic() - started:.1f} s")


if __name__ == "__main__":
    main()
