"""Computation, and the nipype interfaces around it."""

if __name__ == "nodes":
    # A checkout on sys.path would offer this folder as a top-level package, a second copy
    # of every class. One name only.
    raise ImportError("import 'sequester.nodes', not 'nodes' (you are inside the source checkout)")
