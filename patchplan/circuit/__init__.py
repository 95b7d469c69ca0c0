"""Room `circuit`: see DEVELOPERS.md."""
