"""The invented campaign of the demo: scenario and renderer."""
