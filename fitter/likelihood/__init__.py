"""likelihood"""
