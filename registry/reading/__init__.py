"""Which axes and signals does a measured file hold?

``registry.reading.entry.read_file`` is the way in; ``layout.load_layout`` reads the
layout of a file that does not describe itself.  Nothing here writes or stores.
"""
