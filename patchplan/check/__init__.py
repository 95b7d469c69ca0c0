"""Room `check`: see DEVELOPERS.md."""
