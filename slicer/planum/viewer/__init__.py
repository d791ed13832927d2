"""The window: how the scene is controlled."""
