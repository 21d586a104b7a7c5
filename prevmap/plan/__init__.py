"""What the programme does with the estimates."""
