"""Takes a run folder apart: are its files what was written, is the account right, does it come out again?"""
