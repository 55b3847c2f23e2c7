"""Line data to absorption atlas: run by maintainers, or by a user with other line data.

Nothing here is imported when a scene is simulated. The partition sums come
from the `hitran-api` package (extra `build`).
"""
