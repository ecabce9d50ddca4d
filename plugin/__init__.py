"""The plugin: start-up, provider and everything behind the algorithms."""
