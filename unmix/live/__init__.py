"""Chunk by chunk, where the microphones are.

stage.py      what a live separator runs on: the one interface that filter banks and recursive stages share
convolver.py  filters applied to chunks of any size: direct, or uniformly partitioned FFT without added delay
bank.py       a K x M filter bank as a stage, with cross-faded changes
adaptive.py   the low-latency room stage as a stage
refit.py      filters with less reach that change the output least
design.py     from array, talkers and variant to filters; which variants cannot run so, and why
separator.py  LiveSeparator: push, flush, state, bearings
latency.py    latency measured with an impulse
ahead.py      filters for other bearings, designed in a thread beside the audio
keep.py       the state in a file, so that a process that dies loses a chunk at most
meter.py      cost, under-runs
pipe.py       raw samples and WAV from and to a pipe
"""
