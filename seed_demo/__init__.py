"""Which invented laboratory stands behind ``millikeep demo`` and the tests.

Devices, noise, instruments and files are simulated from physics; every chip, cryostat,
person and number in here is made up.
"""
