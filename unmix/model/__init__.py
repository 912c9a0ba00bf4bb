"""The model: a sum of delayed talkers written with their time derivatives.

delays.py           delays and gains of each talker at each microphone, at rest or moving
differentiators.py  derivative filters of a band-limited signal
mixing.py           delays and gains (or measured responses) as short filters: the model with `tied` jets
noise.py            the noise's covariance over frequency, and what whitens it
prior.py            what is believed of a talker before listening
jets.py             the sparse operator over jets, and the constraints `tied` and `propagated`
conditioning.py     what the model can resolve at which frequency
"""
