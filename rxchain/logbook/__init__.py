"""The logbook: what was on the air, with audio, narrow I/Q and figures, in a record that can be shown not to have changed.

`store.py` keeps the entries, `links.py` chains them, `clips.py` the files, `transmissions.py` says where one begins and ends,
`station_log.py` ties them to a receiver at work; `verify.py`, `signing.py`, `listing.py` and `pruning.py` are for afterwards.
"""
