"""A rig simulator: dynamics of the line, a phone camera before it, and the clips and truth tables they made.

It is a stand-in for a laboratory, so it shares no code with what is tested against it: nothing here imports
`calibration` or `tracker`.
"""
