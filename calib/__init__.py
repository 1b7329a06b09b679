"""Turns to answers: the statistics of turns, in numpy and scipy alone."""
