"""mapping"""
