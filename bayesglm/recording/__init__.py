"""What was measured: recordings, the study they belong to, spikes, selection and quality."""
