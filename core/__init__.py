"""The engine of Lotwright; it runs without a window. Rooms, from the ground up: see DEVELOPERS.md."""
