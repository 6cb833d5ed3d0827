#!/usr/bin/env bash
# Remakes demo_images/ with the product's own press, loom and scanner. Run from the checkout's top.
#
# The scenario is invented: the town archive of Lindmoor scans its postcards, the Lindmoor Courier,
# an old cookery magazine and swatches of cloth. Pictures: drawn by us (the card, the leaf) and
# scikit-image's coffee (CC0).
set -euo pipefail
moire=${MOIRE:-moire}
work=$(mktemp -d)
python=${PYTHON:-python}
"$python" - "$work" <<'P'
import sys
import numpy as np
import skimage.data
import skimage.io
from moire.testcard import draw_leaf
skimage.io.imsave(f"{sys.argv[1]}/leaf.png", np.rint(draw_leaf() * 255).astype(np.uint8), check_contrast=False)
skimage.io.imsave(f"{sys.argv[1]}/coffee.png", skimage.data.coffee(), check_contrast=False)
P
mkdir -p demo_images
cd demo_images
"$moire" proof -o harbour-postcard.png --screen 133@15:cyan --screen 133@75:magenta --screen 133@0:yellow \
    --screen 133@45:black --size 1.8x1.35 --ppi 300 --turn 0.8 --gain 0.06 --seed 1 --force
"$moire" proof -o courier-leaf.png --picture "$work/leaf.png" --screen 85@45:black --size 2x1.5 --ppi 300 \
    --turn -0.5 --seed 2 --force
"$moire" proof -o cookery-magazine.png --picture "$work/coffee.png" --screen 120@15:cyan --screen 120@75:magenta \
    --screen 127@0:yellow --screen 120@45:black --size 1.5x1 --ppi 400 --gain 0.05 --seed 3 --force
"$moire" proof -o market-flyer.png --picture "$work/coffee.png" --screen 150@7:black --size 2.6x1.73 --ppi 190 \
    --gain 0.05 --seed 4 --force
"$moire" proof -o blue-ticking.png --cloth 18x15:plain --size 1.2x1.2 --ppi 300 --seed 5 --force
rm -r "$work"
