"""What an auditor runs on a bag: it shares no code with the rest of the program.

Nothing here imports the program's planning, smoothing or auditing. Each rule is written down a second time, from the
documentation, so that a slip in the program and a slip here would have to agree to stay unseen. It needs numpy,
nibabel and, for DICOM series, pydicom. Read it from `auditing.py` on.
"""
