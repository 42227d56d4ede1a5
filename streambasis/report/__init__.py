"""Pictures of a run that was kept: read from its folder, drawn, and put on one page."""
