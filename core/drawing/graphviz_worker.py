"""The worker that runs Graphviz: one JSON request a line on standard input, one answer a line on standard output.

Graphviz is not thread-safe, and importing it into a process that has yet to open an X11 window kills that process, so it
lives in a process of its own. Started by `core.drawing.graph_layout`.
"""

from __future__ import annotations

import json
import sys
from typing import Any


def lay_out(request: dict[str, Any]) -> dict[str, Any]:
    """Positions of node centres, y downwards, in the units of the sizes given. Nodes of a row share their y."""
    import networkx
    from networkx.drawing.nx_agraph import to_agraph

    graph = networkx.MultiDiGraph()
    graph.graph["graph"] = {"rankdir": "TB", "ordering": "out", "splines": "line", "nodesep": "0.4", "ranksep": "0.65"}
    for name, (wide, high) in request["nodes"].items():
        graph.add_node(name, width=str(wide / 72), height=str(high / 72), fixedsize="true", shape="box", label="")
    for number, (above, below) in enumerate(request["edges"]):
        graph.add_edge(above, below, key=str(number), id=str(number), arrowhead="none")
    drawn = to_agraph(graph)
    drawn.layout("dot")
    nodes = {str(node): _point(node.attr["pos"]) for node in drawn.nodes()}
    top = max((y for _, y in nodes.values()), default=0.0)
    return {"nodes": {name: (x, top - y) for name, (x, y) in nodes.items()}}


def _point(text: str) -> tuple[float, float]:
    x, y = text.split(",")[:2]
    return float(x), float(y)


def main() -> None:
    for line in sys.stdin:
        try:
            answer = lay_out(json.loads(line))
        except Exception as error:
            answer = {"error": f"{type(error).__name__}: {error}"}
        print(json.dumps(answer), flush=True)


if __name__ == "__main__":
    main()
