"""carry"""
