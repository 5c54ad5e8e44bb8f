"""What the demo does and shows, in parts: taking, comparing with the truth, putting right, looking on, showing."""
