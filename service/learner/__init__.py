"""Pure estimators: what outcomes have taught, as integers, without clock or storage."""
