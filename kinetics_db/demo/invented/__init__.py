"""Machinery for invented projects: from a plan and a truth to export files, and through the services."""
