"""Its presence lets test files import modules that lie in this folder (drawn_fields)."""
