"""Workbooks and csv folders: reading, writing, the blank template, charts."""
