"""Checked tables, the tree behind the names, and the only unit conversion."""
