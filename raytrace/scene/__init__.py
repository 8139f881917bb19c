"""The scene: its model, its rules, and how files are read and problems told."""
