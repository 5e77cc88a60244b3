"""Where samples come from: recordings and receivers, one file a kind, all of them streams of blocks.

``opening`` chooses by name; ``pacing`` lets a recording take its own time.
"""
