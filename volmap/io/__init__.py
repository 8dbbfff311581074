"""Files in and out: one format a module, nothing heavy imported before it is needed.

Every reader raises `volmap.types.InputError` and nothing else for a bad file; every writer writes a
whole file or none.
"""
