// A rectangular duct, lined on all four sides along its middle third; invented. Metres, x along the duct.
SetFactory("OpenCASCADE");

length = 1.20;
width = 0.30;
height = 0.20;
DefineConstant[ size = {0.10, Name "Parameters/Element size (m)"} ];

// three boxes in a row, joined at their ends
For i In {0:2}
  Box(i + 1) = {i * length / 3, 0, 0, length / 3, width, height};
EndFor
Coherence;

// find the surfaces by where they lie: Coherence may renumber them
e = 1e-4;
inlet() = Surface In BoundingBox {-e, -e, -e, e, width + e, height + e};
outlet() = Surface In BoundingBox {length - e, -e, -e, length + e, width + e, height + e};
seam_1() = Surface In BoundingBox {length / 3 - e, -e, -e, length / 3 + e, width + e, height + e};
seam_2() = Surface In BoundingBox {2 * length / 3 - e, -e, -e, 2 * length / 3 + e, width + e, height + e};
lining() = Surface In BoundingBox {length / 3 - e, -e, -e, 2 * length / 3 + e, width + e, height + e};
lining() -= {seam_1(), seam_2()};
walls() = Surface {:};
walls() -= {inlet(), outlet(), lining(), seam_1(), seam_2()};

Physical Surface("inlet") = {inlet()};
Physical Surface("outlet") = {outlet()};
Physical Surface("lining") = {lining()};
Physical Surface("walls") = {walls()};
Physical Volume("duct_air") = {Volume {:}};

MeshSize {:} = size;
