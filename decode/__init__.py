"""shaftproof: does a rotary encoder's interface do what its sheet says?"""
