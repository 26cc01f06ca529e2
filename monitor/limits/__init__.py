"""Rules, the measures they name, and their evaluation."""
