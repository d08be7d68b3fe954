"""`soundrose demo` from outside: it shows maps, finds its own sounds, leaves nothing running."""

import re
import signal
import subprocess
import sys

DEMO = [sys.executable, "-m", "soundrose", "demo", "--port", "0"]


def test_demo_finds_the_sounds_it_made_and_ends_by_itself():
    done = subprocess.run([*DEMO, "--seconds", "6"], capture_output=True, text=True, timeout=100)
    assert done.returncode == 0, done.stdout + done.stderr
    bearings = re.findall(r"true +([\d.]+)°\s+loudest beam +([\d.]+)°", done.stdout)
    assert len(bearings) == 4, done.stdout
    for true, found in bearings:
        assert abs(float(true) - float(found)) <= 1.0  # a beam of the grid: 0.8 deg apart at broadside
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
