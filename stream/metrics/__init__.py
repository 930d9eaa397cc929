"""Progressive metrics: predictions made before each update in, figures by run, window and slice out."""

from stream.metrics.progress import Progress
from stream.metrics.summary import Summary, WindowRow

__all__ = ["Progress", "Summary", "WindowRow"]
