"""STEP files written entity by entity (ISO 10303-21, AP214), so that tests know every word in them.

Solids are boundary representations of planes, cylinders and spheres; lengths are given in mm and written in the unit
asked for.
"""

import math

_UNITS = {
    "mm": (1.0, "( LENGTH_UNIT() NAMED_UNIT(*) SI_UNIT(.MILLI.,.METRE.) )"),
    "m": (1e3, "( LENGTH_UNIT() NAMED_UNIT(*) SI_UNIT($,.METRE.) )"),
    "km": (1e6, "( LENGTH_UNIT() NAMED_UNIT(*) SI_UNIT(.KILO.,.METRE.) )"),
    "in": (25.4, None),
}


class StepFile:
    """Entities of one file."""

    def __init__(self, unit="mm"):
        self.rows = []
        self.scale, entity = _UNITS[unit]
        if entity is None:
            millimetre = self.add(_UNITS["mm"][1])
            measure = self.add(f"LENGTH_MEASURE_WITH_UNIT(LENGTH_MEASURE({self.scale}),#{millimetre})")
            sizes = self.add("DIMENSIONAL_EXPONENTS(1.,0.,0.,0.,0.,0.,0.)")
            entity = f"( CONVERSION_BASED_UNIT('INCH',#{measure}) LENGTH_UNIT() NAMED_UNIT(#{sizes}) )"
        self.unit = self.add(entity)
        angle = self.add("( NAMED_UNIT(*) PLANE_ANGLE_UNIT() SI_UNIT($,.RADIAN.) )")
        solid = self.add("( NAMED_UNIT(*) SI_UNIT($,.STERADIAN.) SOLID_ANGLE_UNIT() )")
        within = self.add(f"UNCERTAINTY_MEASURE_WITH_UNIT(LENGTH_MEASURE(1.E-07),#{self.unit},'accuracy','')")
        self.context = self.add(
            f"( GEOMETRIC_REPRESENTATION_CONTEXT(3) GLOBAL_UNCERTAINTY_ASSIGNED_CONTEXT((#{within})) "
            f"GLOBAL_UNIT_ASSIGNED_CONTEXT((#{self.unit},#{angle},#{solid})) REPRESENTATION_CONTEXT('','3D') )"
        )
        self.application = self.add("APPLICATION_CONTEXT('automotive design')")
        self.origin = self.axes((0, 0, 0))

    def add(self, text):
        self.rows.append(text)
        return len(self.rows)

    def text(self):
        head = (
            "ISO-10303-21;\nHEADER;\nFILE_DESCRIPTION((''),'2;1');\nFILE_NAME('','',(''),(''),'','','');\n"
            "FILE_SCHEMA(('AUTOMOTIVE_DESIGN { 1 0 10303 214 1 1 1 1 }'));\nENDSEC;\nDATA;\n"
        )
        body = "".join(f"#{k} = {row};\n" for k, row in enumerate(self.rows, start=1))
        return head + body + "ENDSEC;\nEND-ISO-10303-21;\n"

    def point(self, p):
        return self.add("CARTESIAN_POINT('',({}))".format(",".join(_real(x / self.scale) for x in p)))

    def direction(self, d):
        return self.add("DIRECTION('',({}))".format(",".join(_real(x) for x in d)))

    def axes(self, at, z=(0, 0, 1), x=(1, 0, 0)):
        return self.add(f"AXIS2_PLACEMENT_3D('',#{self.point(at)},#{self.direction(z)},#{self.direction(x)})")

    def length(self, value):
        return _real(value / self.scale)

    def vertex(self, p):
        return self.add(f"VERTEX_POINT('',#{self.point(p)})")

    def line(self, a, b, start, stop):
        step = [q - p for p, q in zip(start, stop, strict=True)]
        size = math.sqrt(sum(x * x for x in step))
        vector = self.add(f"VECTOR('',#{self.direction([x / size for x in step])},{self.length(size)})")
        curve = self.add(f"LINE('',#{self.point(start)},#{vector})")
        return self.add(f"EDGE_CURVE('',#{a},#{b},#{curve},.T.)")

    def arc(self, a, b, axes, radius):
        curve = self.add(f"CIRCLE('',#{axes},{self.length(radius)})")
        return self.add(f"EDGE_CURVE('',#{a},#{b},#{curve},.T.)")

    def face(self, surface, *loops, same=True):
        """A face; each loop is a list of (edge, along), the outer one first."""
        bounds = []
        for k, loop in enumerate(loops):
            edges = [self.add(f"ORIENTED_EDGE('',*,*,#{edge},.{'FT'[along]}.)") for edge, along in loop]
            ring = self.add("EDGE_LOOP('',({}))".format(",".join(f"#{edge}" for edge in edges)))
            bounds.append(self.add(f"FACE_{'' if k else 'OUTER_'}BOUND('',#{ring},.T.)"))
        return self._face(bounds, surface, same)

    def _face(self, bounds, surface, same):
        listed = ",".join(f"#{bound}" for bound in bounds)
        return self.add(f"ADVANCED_FACE('',({listed}),#{surface},.{'FT'[same]}.)")

    def plane(self, at, normal, x):
        return self.add(f"PLANE('',#{self.axes(at, normal, x)})")

    def solid(self, faces):
        shell = self.add("CLOSED_SHELL('',({}))".format(",".join(f"#{face}" for face in faces)))
        return self.add(f"MANIFOLD_SOLID_BREP('',#{shell})")

    def ball(self, radius):
        """A sphere about the origin: one face, bounded by its south pole alone."""
        pole = self.add(f"VERTEX_LOOP('',#{self.vertex((0, 0, -radius))})")
        surface = self.add(f"SPHERICAL_SURFACE('',#{self.axes((0, 0, 0))},{self.length(radius)})")
        return self.solid([self._face([self.add(f"FACE_BOUND('',#{pole},.T.)")], surface, True)])

    def bracket(self):
        """A box 40 x 20 x 10 with a bore of radius 5 along z at (15, 10) and a fillet of 3 along y."""
        outline = [(0, 0), (40, 0), (40, 7), (37, 10), (0, 10)]  # x and z, counter-clockwise seen from -y
        near = [(x, 0, z) for x, z in outline]
        far = [(x, 20, z) for x, z in outline]
        v = [[self.vertex(p) for p in row] for row in (near, far)]
        rims = []
        for row, y, points in ((v[0], 0, near), (v[1], 20, far)):
            edges = [self.line(row[k], row[(k + 1) % 5], points[k], points[(k + 1) % 5]) for k in (0, 1, 3, 4)]
            edges.insert(2, self.arc(row[2], row[3], self.axes((37, y, 7), (0, -1, 0), (1, 0, 0)), 3))
            rims.append(edges)
        along = [self.line(v[0][k], v[1][k], near[k], far[k]) for k in range(5)]
        foot, head = self.vertex((20, 10, 0)), self.vertex((20, 10, 10))
        low = self.arc(foot, foot, self.axes((15, 10, 0)), 5)
        high = self.arc(head, head, self.axes((15, 10, 10)), 5)
        seam = self.line(foot, head, (20, 10, 0), (20, 10, 10))
        sides = [[(rims[0][k], 0), (along[k], 1), (rims[1][k], 1), (along[(k + 1) % 5], 0)] for k in range(5)]
        faces = [
            self.face(self.plane((0, 0, 0), (0, -1, 0), (1, 0, 0)), [(edge, 1) for edge in rims[0]]),
            self.face(self.plane((0, 20, 0), (0, 1, 0), (1, 0, 0)), [(edge, 0) for edge in rims[1][::-1]]),
            self.face(self.plane((0, 0, 0), (0, 0, -1), (1, 0, 0)), sides[0], [(low, 1)]),
            self.face(self.plane((40, 0, 0), (1, 0, 0), (0, 1, 0)), sides[1]),
            self.face(
                self.add(f"CYLINDRICAL_SURFACE('',#{self.axes((37, 0, 7), (0, 1, 0), (1, 0, 0))},{self.length(3)})"),
                sides[2],
            ),
            self.face(self.plane((0, 0, 10), (0, 0, 1), (1, 0, 0)), sides[3], [(high, 0)]),
            self.face(self.plane((0, 0, 0), (-1, 0, 0), (0, 1, 0)), sides[4]),
            self.face(
                self.add(f"CYLINDRICAL_SURFACE('',#{self.axes((15, 10, 0))},{self.length(5)})"),
                [(low, 0), (seam, 1), (high, 1), (seam, 0)],
                same=False,
            ),
        ]
        return self.solid(faces)

    def product(self, name, kind, items):
        """A part or assembly by name: its definition and its shape."""
        context = self.add(f"PRODUCT_CONTEXT('',#{self.application},'mechanical')")
        made = self.add(f"PRODUCT('{name}','{name}','',(#{context}))")
        formation = self.add(f"PRODUCT_DEFINITION_FORMATION('','',#{made})")
        view = self.add(f"PRODUCT_DEFINITION_CONTEXT('part definition',#{self.application},'design')")
        definition = self.add(f"PRODUCT_DEFINITION('design','',#{formation},#{view})")
        shape = self.add(f"PRODUCT_DEFINITION_SHAPE('','',#{definition})")
        listed = ",".join(f"#{item}" for item in items)
        form = self.add(f"{kind}('',({listed}),#{self.context})")
        self.add(f"SHAPE_DEFINITION_REPRESENTATION(#{shape},#{form})")
        return definition, form

    def part(self, name, solid):
        return self.product(name, "ADVANCED_BREP_SHAPE_REPRESENTATION", [self.origin, solid])

    def assembly(self, name, uses):
        """Parts placed: each of uses is (name, part, axes)."""
        top, form = self.product(name, "SHAPE_REPRESENTATION", [self.origin, *(axes for _, _, axes in uses)])
        for k, (use, (definition, shape), axes) in enumerate(uses, start=1):
            move = self.add(f"ITEM_DEFINED_TRANSFORMATION('','',#{self.origin},#{axes})")
            relation = self.add(
                f"( REPRESENTATION_RELATIONSHIP('','',#{shape},#{form}) "
                f"REPRESENTATION_RELATIONSHIP_WITH_TRANSFORMATION(#{move}) SHAPE_REPRESENTATION_RELATIONSHIP() )"
            )
            used = self.add(f"NEXT_ASSEMBLY_USAGE_OCCURRENCE('{k}','{use}','',#{top},#{definition},$)")
            placed = self.add(f"PRODUCT_DEFINITION_SHAPE('Placement','',#{used})")
            self.add(f"CONTEXT_DEPENDENT_SHAPE_REPRESENTATION(#{relation},#{placed})")


def _real(x):
    text = repr(float(x)).upper()
    return text if "." in text else text.replace("E", ".E")


def ball_step(unit="mm", radius=8.0):
    file = StepFile(unit)
    file.part("ball", file.ball(radius))
    return file.text()


def bracket_step(unit="mm"):
    file = StepFile(unit)
    file.part("bracket", file.bracket())
    return file.text()


def rig_step(unit="mm"):
    """The bracket, and the ball above it, turned."""
    file = StepFile(unit)
    bracket = file.part("bracket", file.bracket())
    ball = file.part("ball", file.ball(8.0))
    turned = file.axes((20, 10, 25), (0, 0.6, 0.8), (1, 0, 0))
    file.assembly("rig", [("drive", bracket, file.origin), ("sense", ball, turned)])
    return file.text()
