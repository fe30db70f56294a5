"""Scripts live here, not tests: pytest collects nothing."""

collect_ignore_glob = ["*.py"]
