"""Room `patch`: see DEVELOPERS.md."""
