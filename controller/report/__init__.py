"""Tables and plots of finished work."""
