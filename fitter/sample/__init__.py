"""sample"""
