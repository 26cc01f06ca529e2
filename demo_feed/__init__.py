"""Saltmere Trust, an invented firm: its site file, its rules and a year of evenings on which things go wrong."""
