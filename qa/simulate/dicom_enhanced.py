"""A digital scan as one Enhanced MR object: every slice a frame, with functional groups (PS3.3, A.36 and C.8.13)."""
