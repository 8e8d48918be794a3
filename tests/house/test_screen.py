"""Qt on a real X11 screen, with graph layout in a process of its own beside the window."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

from tests.house.screen import virtual_screen

ROOT = Path(__file__).resolve().parents[2]

# Graphviz is no guest in the window's process: a spawned one, since a forked one would inherit the connection to X11.
WINDOW = """
import json, multiprocessing, sys

def lay_out(edges):
    import pygraphviz
    graph = pygraphviz.AGraph(directed=True)
    graph.add_edges_from(edges)
    graph.layout(prog="dot")
    return {str(n): [float(part) for part in graph.get_node(n).attr["pos"].split(",")] for n in graph.nodes()}

if __name__ == "__main__":
    from PySide6.QtWidgets import QApplication, QLabel
    application = QApplication([])
    label = QLabel("sheet")
    label.show()
    application.processEvents()
    with multiprocessing.get_context("spawn").Pool(1) as pool:
        places = pool.apply(lay_out, ([("join", "left"), ("join", "right")],))
    application.processEvents()
    picture = label.grab()
    print(json.dumps({
        "platform": application.platformName(), "visible": label.isVisible(), "width": picture.width(),
        "places": places, "pygraphviz here": "pygraphviz" in sys.modules,
    }))
"""


def test_a_window_on_x11_lives_beside_the_process_that_lays_out_graphs(tmp_path: Path) -> None:
    script = tmp_path / "window.py"
    script.write_text(WINDOW, encoding="utf-8")
    with virtual_screen() as environment:
        done = subprocess.run(
            [sys.executable, str(script)], env=environment, capture_output=True, text=True, check=False, timeout=120
        )
    assert done.returncode == 0, done.stderr
    said = json.loads(done.stdout)
    assert said["platform"] == "xcb" and said["visible"] and said["width"] > 0
    assert not said["pygraphviz here"]
    places = said["places"]
    assert set(places) == {"join", "left", "right"}
    assert places["join"][1] > places["left"][1] == places["right"][1], "dot ranks the source above its targets"
    assert places["left"][0] != places["right"][0]


# The whole window, closed as a person closes it; a failure to make X11's connection would end the process.
SHEET = """
import json, sys
from app.window import Window, application

made = application()
window = Window(dark=False)
window.show()
for _ in range(20):
    made.processEvents()
picture = window.grab().toImage()
colours = {picture.pixel(x, y) for x in range(0, picture.width(), 7) for y in range(0, picture.height(), 7)}
seen = {"platform": made.platformName(), "visible": window.isVisible(), "colours": len(colours)}
window.close()
made.processEvents()
print(json.dumps({**seen, "closed": not window.isVisible(), "pygraphviz here": "pygraphviz" in sys.modules}))
"""


def test_the_window_opens_and_closes_on_x11() -> None:
    with virtual_screen() as environment:
        done = subprocess.run(
            [sys.executable, "-c", SHEET],
            cwd=ROOT,
            env=environment,
            capture_output=True,
            text=True,
            check=False,
            timeout=120,
        )
    assert done.returncode == 0, done.stderr
    said = json.loads(done.stdout)
    assert said["platform"] == "xcb" and said["visible"] and said["closed"]
    assert said["colours"] > 3, "the window is blank"
    assert not said["pygraphviz here"]
