"""From the drop to a world: files accepted or refused, what is known, calendars, build."""
