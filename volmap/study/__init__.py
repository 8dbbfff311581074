"""Floor 5: many scans of many subjects, mapped as a whole and handed over to statistics."""
