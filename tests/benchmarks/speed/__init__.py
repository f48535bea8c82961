"""The parts of the benchmark suite of speed; ../speed.py is its entry."""
