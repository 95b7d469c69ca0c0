"""Room `form`: see DEVELOPERS.md."""
