"""bitassay: a hardware-in-the-loop bit error ratio test harness."""
