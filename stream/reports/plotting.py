"""Nothing in, the plotting library's script out, to be put into a page; the one place that imports plotly."""

from __future__ import annotations

__all__ = ["script", "script_version"]


def script() -> str:
    """The whole script (4.8 MB), safe inside a `<script>` element; draws without asking the network."""
    from plotly.offline import get_plotlyjs

    return str(get_plotlyjs()).replace("</script", "<\\/script")


def script_version() -> str:
    """The script's own version, which is not that of the Python package."""
    from plotly.offline import get_plotlyjs_version

    return str(get_plotlyjs_version())
