"""What a laboratory hands over, turned into counts."""
