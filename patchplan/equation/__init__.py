"""Room `equation`: see DEVELOPERS.md."""
