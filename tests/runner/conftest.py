"""Its presence lets test files import modules that lie in this folder (runner_tasks)."""
