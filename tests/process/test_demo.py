"""`soundrose demo` from outside: it shows maps, finds its own sounds, leaves nothing running."""

import re
import signal
import subprocess
import sys

DEMO = [sys.executable, "-m", "soundrose", "demo", "--port", "0"]


def test_demo_says_where_to_look_hears_the_passing_ship_and_ends_by_itself():
    done = subprocess.run([*DEMO, "--seconds", "6"], capture_output=True, text=True, timeout=100)
    assert done.returncode == 0, done.stdout + done.stderr
    assert re.match(r"\s*http://127\.0\.0\.1:\d+/\s", done.stdout), done.stdout  # first of all
    seen = re.search(r"away from own ship: ([\d.]+)°; truly there: .*Tindvik ([\d.]+)°", done.stdout)
    (loudest, ship) = seen.groups()
    assert abs(float(loudest) - float(ship)) <= 3.0, done.stdout  # two beams of the grid there
    (maps, missed) = re.search(r"(\d+) maps; missed (\d+)", done.stdout).groups()
    assert int(maps) >= 10
    assert missed == "0"
    assert "Not a navigation" in done.stdout


def test_demo_told_to_end_says_what_it_saw():
    process = subprocess.Popen(DEMO, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True)
    try:
        for line in process.stdout:
            if "loudest" in line:
                break
        process.send_signal(signal.SIGTERM)
        rest, _ = process.communicate(timeout=60)
    finally:
        process.kill()
        process.wait()
    assert process.returncode == 0, rest
    assert " maps; missed" in rest
