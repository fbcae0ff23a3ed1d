"""Turn recorded waveforms into end voltages, counts and their scatter: arrays in, values out."""
