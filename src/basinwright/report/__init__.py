"""The report of a run: an index and a page for each outlet, readable from a file with no network.

Every page stands alone: its style, its script and its pictures are inside it, so that it can be mailed by itself. The
pages hold nothing but what the run's tables, layers and manifest say, rounded as an engineer would sign it; the time
of the run is left to ``run.json``, so that the same input gives the same pages, byte for byte.
"""

from basinwright.report.pages import ONE_FILE, write_outlet_page, write_report

__all__ = ["ONE_FILE", "write_outlet_page", "write_report"]
