"""cosmology"""
