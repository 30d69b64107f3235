"""Pure rules of money and of the stream: integers only, nothing is ever edited."""
