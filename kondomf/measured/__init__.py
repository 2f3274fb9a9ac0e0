"""What does a measurement say about the parameters?"""
