"""Truth and data: random and known networks, and the datasets sampled from them.

Nothing here imports `harness`: a network and its data can be drawn without any learner in sight.
"""
