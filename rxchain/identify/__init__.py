"""Which emission is this, and how sure: measurements with a meaning each, evidence learnt from the project's own synthesis.

Start at `naming.py`; `measurements.py` says what is measured, `evidence.py` how it adds up, `search.py` where to look.
"""
