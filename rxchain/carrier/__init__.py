"""Carriers, pilots and suppressed carriers: found, followed through noise and fades, and turned upright.

``follower`` is the whole of it; ``acquisition`` finds a line, ``frequency_filter`` follows it, ``window_contest`` smooths its
phase, ``lock_watch`` says what can be claimed, ``derotation`` turns the samples.
"""
