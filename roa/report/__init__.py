"""Room 6, *who must understand it?*: figures, the HTML report, the text summary."""
