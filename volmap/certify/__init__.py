"""certify"""
