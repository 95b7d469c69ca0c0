"""Room `sizing`: see DEVELOPERS.md."""
