"""What is counted for machines: plain integers in memory that a crew shares, told as Prometheus."""
