"""EXIF times against exiftool, which writes the tags; Y4M against ffmpeg, which makes the stream. Both come from Debian."""

import datetime
import json
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
from PIL import Image

results = Path(sys.argv[1]).with_name("reference-results")
work = Path(tempfile.mkdtemp())
failed = False


def ask(**request):
    answer = subprocess.run([results], input=json.dumps(request), capture_output=True, text=True, check=True)
    return json.loads(answer.stdout)


def check(what, good, detail=""):
    global failed
    failed |= not good
    print(f"{'ok' if good else 'FAILED'}: {what}{detail}")


def need(program, package):
    if shutil.which(program):
        return
    print(f"info: installing {package}")
    subprocess.run(["apt-get", "update", "-qq"], check=True)
    subprocess.run(["apt-get", "install", "-y", "-qq", package], check=True, stdout=subprocess.DEVNULL)


need("exiftool", "libimage-exiftool-perl")
need("ffmpeg", "ffmpeg")

utc = datetime.datetime(2026, 3, 4, 5, 6, 7, tzinfo=datetime.timezone.utc).timestamp()
cases = [
    ("jpg", ["-DateTimeOriginal=2026:03:04 05:06:07", "-SubSecTimeOriginal=25", "-OffsetTimeOriginal=+00:00", "-ExposureTime=1/8"], utc + 0.255, 0.125),
    ("jpg", ["-DateTimeOriginal=2026:03:04 10:36:07", "-SubSecTimeOriginal=123456", "-OffsetTimeOriginal=+05:30", "-ExposureTime=0.2"], utc + 0.1234565, 0.2),
    ("png", ["-DateTimeOriginal=2026:03:03 21:06:07", "-OffsetTimeOriginal=-08:00", "-ExposureTime=2"], utc + 0.5, 2.0),
    ("png", ["-DateTimeOriginal=2026:03:04 05:06:07", "-ExposureTime=2"], None, None),
    ("jpg", ["-Artist=nobody"], None, None),
]
for number, (kind, tags, start, seconds) in enumerate(cases):
    path = work / f"frame{number}.{kind}"
    Image.fromarray(np.full((16, 16), 80, dtype=np.uint8)).save(path)
    subprocess.run(["exiftool", "-q", "-overwrite_original", *tags, path], check=True)
    answer = ask(what="exif", file=str(path))
    if start is None:
        check(f"{path.name}: {tags[0]} without a zone or time is not guessed", "unknown" in answer)
        continue
    off = answer["start_utc_ns"] * 1e-9 - start
    length = (answer["end_utc_ns"] - answer["start_utc_ns"]) * 1e-9
    check(f"{path.name}: time and exposure as exiftool wrote them", abs(off) < 1e-6 and abs(length - seconds) < 1e-9, f" (off by {off:.1e} s)")

rng = np.random.default_rng(3)
levels = rng.integers(20, 230, 40)
raw = b"".join(
    np.pad(np.full((10, 20), level, dtype=np.uint8), ((30, 24), (60, 80)), constant_values=16).tobytes() for level in levels
)
video = work / "clip.y4m"
subprocess.run(
    ["ffmpeg", "-v", "error", "-f", "rawvideo", "-pix_fmt", "gray", "-s", "160x64", "-r", "30000/1001", "-i", "-",
     "-pix_fmt", "yuv420p", "-color_range", "pc", "-sws_flags", "accurate_rnd", "-strict", "-1", "-f", "yuv4mpegpipe", video],
    input=raw, check=True,
)
answer = ask(what="patch", file=str(video), patch="62,32,16,6")
measured = np.array(answer["brightness"])
# The encoder may map full to studio range: a straight line, whatever its slope.
slope, intercept = np.polyfit(levels, measured, 1)
off = np.max(np.abs(measured - (slope * levels + intercept)))
check("Y4M from ffmpeg: every frame's patch", measured.size == levels.size and off < 1.0 and 0.8 < slope <= 1.01, f" ({off:.2f} levels off a line of slope {slope:.3f})")
check("Y4M from ffmpeg: frame rate", abs(answer["frame_seconds"] - 1001 / 30000) < 1e-12)

shutil.rmtree(work)
sys.exit(failed)
