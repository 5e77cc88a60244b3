"""From a channel with its carrier upright to the message: envelope, rectifier, and the coherent detector's forms.

``coherent`` is one filter bank whose taps say which emission it serves: ``sidebands``, ``vestigial`` and ``quadrature``
design them; ``stereo`` adds the law of compatible quadrature stereo. ``picker`` chooses between detectors.
"""
