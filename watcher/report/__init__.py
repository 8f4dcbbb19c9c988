"""The weekly report and the charts that it shares with the page."""
