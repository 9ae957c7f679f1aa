"""The page and the command line; every number on them comes from `lozenge_engine`."""
