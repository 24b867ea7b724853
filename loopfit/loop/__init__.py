"""The loop itself: controller, plant, exact roots with dead time, margins, sampled loop, simulation."""
