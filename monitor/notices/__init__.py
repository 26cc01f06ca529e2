"""Telling people: what a notice says, who gets it, and the outbox in which it waits until a channel took it."""
