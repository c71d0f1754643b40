"""Mean field beside quasi-exact chains: which of its outputs to believe in one dimension, with the numbers behind it.

compare(what)      a mixture, a solved run, one stored entry or the whole stored set, as a dataset
references.load()  the stored entries, by name
"""
