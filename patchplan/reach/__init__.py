"""Room `reach`: see DEVELOPERS.md."""
