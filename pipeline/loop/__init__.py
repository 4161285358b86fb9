"""The loop: controller equations, margins with exact dead time, closed-loop simulation."""
