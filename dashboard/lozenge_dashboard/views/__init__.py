"""The views of the page, one per file: records in, a named tuple, a figure."""
