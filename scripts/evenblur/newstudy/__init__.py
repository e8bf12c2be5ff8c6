"""Begin a study: look through a data set and propose the four files of the study folder.

What cannot be told from the data stays an empty cell with a note; nothing is made up, nothing is overwritten, and the
images stay where they are.
"""
