"""A simulated wheel, stream and camera with exact ground truth.

The shortest way to pictures with truth::

    stream = Stream(optics, find_steel("C45"), sparks_per_s=4000, rng=numpy.random.default_rng(1))
    picture, truth = stream.frame()
"""
