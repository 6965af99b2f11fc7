"""Anticlast plans, posts and proves saddle-surface milling on small 4- and 5-axis mills."""

from __future__ import annotations

from typing import Any

__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    """Load the pipeline only when it is used: ``anticlast --help`` must not pay for numpy."""
    if name in {"make", "load_job", "survey", "prove"}:
        from anticlast import pipeline

        return getattr(pipeline, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
