"""What a channel is made of, how like channels work together, and the receiver that runs them all.

``channel_settings`` and ``station`` say what is wanted; ``grouping`` puts like channels together; ``channel_group`` is
their whole way from I/Q to audio; ``receiver`` runs the bank and the groups; ``runner`` feeds it from a source.
"""
