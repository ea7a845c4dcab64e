"""Loops over cells, compiled: arrays and numbers in and out, nothing of the rest known.

Every file stands alone, because a compiled loop is kept on disk under the time stamp of its own
file: a loop that called into another file would go on with what that file used to say.
"""
