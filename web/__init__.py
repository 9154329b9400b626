"""Templates and static files of the page."""
