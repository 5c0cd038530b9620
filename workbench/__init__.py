"""Loop Workbench: from a bump-test record to controller settings an engineer can defend."""

__version__ = "0.1.0"
