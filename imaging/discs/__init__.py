"""Where the disc is: limbs, planet centroids, contact and light-curve timing."""
