"""Studies, ancestry, the guard and ready-made plans."""

if __name__ == "workflows":
    raise ImportError(
        "import 'sequester.workflows', not 'workflows' (you are inside the source checkout)"
    )
