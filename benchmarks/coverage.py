"""stub"""
ROWS = ()
