"""Models with known truth to shot records: elastic waveforms, field noise, SEG-Y headers, the demo survey."""
