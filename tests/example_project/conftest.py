"""These tests belong to a project of its own: without it installed there is nothing to collect."""

import importlib.util

collect_ignore_glob = [] if importlib.util.find_spec("taut_string") else ["*"]
