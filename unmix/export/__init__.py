"""A variant's filters for those who build the device.

sir.py        signal to interference of a filter bank: by formula, and measured on talkers
shorten.py    tap length from a stated loss
words.py      word lengths: rounding, and what it costs by formula
costs.py      multiply-accumulates, memory and latency of the two forms of convolution
grid.py       a table of filters over bearings, and interpolation between its entries
files.py      NumPy archive, CSV and C header, out and in
job.py        export_bank: all of it into a folder
tradeoffs.py  quality against latency, work and word length for the presets on an array
"""
