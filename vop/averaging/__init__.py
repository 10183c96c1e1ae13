"""Averaging cubes: found from the tissue alone, then applied to any density.

:mod:`vop.averaging.geometry` finds the cubes, :mod:`~vop.averaging.tiles` cuts the body into parts that fit
into memory, :mod:`~vop.averaging.samples` reads E around a part, :mod:`~vop.averaging.apply` averages the
matrix entries of a part over its cubes.

What the rule "iec-62704-1" rests on
------------------------------------
From memory of IEC/IEEE 62704-1:2017; the text was not at hand:

* an axis-aligned cube centred on each tissue voxel grows until its tissue has the mass, the outermost
  layer counting by the fraction of it that is inside;
* it is *valid* if background fills at most 10 % of its volume and no face lies wholly outside the body;
* a voxel that is not valid but wholly inside a valid cube is *used* and takes the largest average of the
  valid cubes that wholly hold it;
* each voxel that remains, *unused*, gets six cubes with the voxel in the middle of one face, grown to the
  mass regardless of background; of those within 5 % of the smallest volume the largest average counts.

Derived: averaging is linear in the density and weights depend on tissue alone, so that n² real densities
share one geometry; a used voxel adds no matrix where limits are equal; each cube that competes at an unused
voxel becomes a matrix, for the largest of them depends on the excitation.

Decided here, where the text is silent or not remembered:

* the side is continuous, on graded grids too, and the mass is met to rounding (1e-10 asked);
* where the mass has a plateau (cavity, gap of air), the smallest side;
* air inside the body is background like air outside;
* a face is wholly outside if the layer of cells on its inner side holds no tissue within the face;
* beyond the end of the grid lies background; a body that reaches it is a warning;
* the voxel's outer face, not its centre, lies in the face of a face-anchored cube, which so holds the
  whole voxel;
* a face-anchored cube that nowhere finds the mass does not compete; where none of the six finds it, or the
  whole body has too little, the voxel keeps its point SAR, and a warning gives the number;
* a separate piece of tissue of less than the mass follows the rule, its cubes reaching over background into
  other tissue, and a warning gives number, mass and voxels of such pieces;
* ties of 10 %, 5 % and "wholly inside" resolve to more candidates within 1e-9;
* power and mass are averaged apart, then divided; several samples of a component in a cell give the mean of
  their outer products, or by option the outer product of their mean.
"""
