"""The register of excesses: a pure fold of standings, no numpy and no clock."""
