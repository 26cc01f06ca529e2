"""When evenings happen: the schedule, catching up, stopping."""
