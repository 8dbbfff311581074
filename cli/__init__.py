"""Floor 7: parse, one call, print, exit status; a short file a verb."""
