"""A receiver for the amplitude-modulation family.

The packages follow the signal: ``sources`` → ``tuning`` → ``carrier`` → ``detectors`` → ``audio`` → ``meters`` →
``chain`` → ``sinks``; ``kernels`` holds the pure functions all of them use, ``cli`` the commands.
"""

__version__ = "0.1.0"
