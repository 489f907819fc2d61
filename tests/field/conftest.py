"""Its presence lets test files import modules that lie in this folder (random_fields)."""
