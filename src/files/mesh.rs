//! Triangle meshes of a tip for other programs: binary STL and binary PLY.
//!
//! Axes: x along the fast axis, y *against* the slow axis (rows run down the screen, y up it, so that
//! the shape is not mirrored), z along the tip's axis with the apex up and at the origin. Lengths are
//! nanometres; STL has no field for a unit, so its header says it in words, PLY in a comment.
//! Formats: StereoLithography Interface Specification (3D Systems, 1989) and the PLY Polygon File
//! Format (Turk, 1994), both from memory. Written by hand because the crates at hand leave no room
//! for the unit.

use super::write::write_atomically;
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use ndarray::ArrayView2;
use std::collections::HashSet;
use std::path::Path;

/// A triangle mesh; corners run counter-clockwise seen from outside.
#[derive(Debug, Clone, PartialEq)]
pub struct Mesh {
    /// Places, nm.
    pub vertices: Vec<[f32; 3]>,
    /// Corners of each triangle as indices into the vertices.
    pub triangles: Vec<[u32; 3]>,
}

/// Whether the ending of `path` is that of a mesh: `.stl`, `.ply`.
pub fn is_mesh(path: &Path) -> bool {
    matches!(ending(path).as_str(), "stl" | "ply")
}

fn ending(path: &Path) -> String {
    let ending = path.extension().unwrap_or_default();
    ending.to_string_lossy().to_ascii_lowercase()
}

/// Writes `mesh` as binary STL or PLY by the ending of `path`, atomically.
///
/// Errors: `Io`; `Setting` for another ending.
pub fn write_mesh(path: &Path, mesh: &Mesh) -> Result<()> {
    let bytes = match ending(path).as_str() {
        "stl" => mesh.stl(),
        "ply" => mesh.ply(),
        other => {
            return Err(Error::new(
                ErrorKind::Setting,
                format!(
                    "{}: no mesh is written under the ending \"{other}\"",
                    path.display()
                ),
            )
            .remedy("Use .stl or .ply"));
        }
    };
    write_atomically(path, &bytes)
}

impl Mesh {
    /// The tip's surface alone: two triangles for each four neighbouring cells, one where a corner
    /// lies outside the tip. `heights` in nm, apex up and in the centre, `-inf` outside.
    ///
    /// Errors of kind `Data`: no triangle at all (a tip of one cell or one row).
    pub fn open(heights: ArrayView2<'_, f32>, pitch: Pitch) -> Result<Self> {
        let (rows, columns) = heights.dim();
        let mut index = vec![u32::MAX; rows * columns];
        let mut mesh = Self {
            vertices: Vec::new(),
            triangles: Vec::new(),
        };
        let mut corner = |mesh: &mut Self, (r, c): (usize, usize)| {
            let known = &mut index[r * columns + c];
            if *known == u32::MAX {
                *known = mesh.vertices.len() as u32;
                mesh.vertices.push([
                    ((c as f64 - (columns / 2) as f64) * pitch.x) as f32,
                    (((rows / 2) as f64 - r as f64) * pitch.y) as f32,
                    heights[[r, c]],
                ]);
            }
            *known
        };
        for r in 1..rows {
            for c in 1..columns {
                let [a, b, d, e] = [(r - 1, c - 1), (r - 1, c), (r, c - 1), (r, c)];
                let inside = |at: &(usize, usize)| heights[*at].is_finite();
                // The diagonal that leaves a whole triangle where one corner is outside.
                let pairs = if inside(&a) && inside(&e) {
                    [[a, d, e], [a, e, b]]
                } else {
                    [[a, d, b], [b, d, e]]
                };
                for triangle in pairs {
                    if triangle.iter().all(inside) {
                        let corners = triangle.map(|at| corner(&mut mesh, at));
                        mesh.triangles.push(corners);
                    }
                }
            }
        }
        if mesh.triangles.is_empty() {
            return Err(Error::new(
                ErrorKind::Data,
                format!("a tip of {columns} x {rows} cells has no surface to mesh"),
            )
            .remedy("Give a tip of at least 3 x 3 cells"));
        }
        Ok(mesh)
    }

    /// The tip as a solid: its surface, upright walls below its rim, and a flat base one pixel pitch
    /// below its deepest cell. Walls and base are no part of the tip. Errors as [`Mesh::open`].
    pub fn closed(heights: ArrayView2<'_, f32>, pitch: Pitch) -> Result<Self> {
        let mut mesh = Self::open(heights, pitch)?;
        let lowest = mesh.vertices.iter().map(|v| v[2]).fold(0.0, f32::min);
        let base = lowest - pitch.x.max(pitch.y) as f32;
        let count = mesh.vertices.len() as u32;
        let top = mesh.triangles.clone();
        let edges: HashSet<[u32; 2]> = top.iter().flat_map(|t| sides(*t)).collect();
        for i in 0..count as usize {
            let [x, y, _] = mesh.vertices[i];
            mesh.vertices.push([x, y, base]);
        }
        for &[a, b, c] in &top {
            mesh.triangles.push([c + count, b + count, a + count]);
            for [u, v] in sides([a, b, c]) {
                // A side that no other triangle runs along backwards lies on the rim.
                if !edges.contains(&[v, u]) {
                    mesh.triangles.push([v, u, u + count]);
                    mesh.triangles.push([v, u + count, v + count]);
                }
            }
        }
        Ok(mesh)
    }

    /// Volume within a closed mesh, nm^3: the sum of the tetrahedra from the origin.
    pub fn volume_nm3(&self) -> f64 {
        let part = |t: &[u32; 3]| {
            let [a, b, c] = t.map(|i| self.vertices[i as usize].map(f64::from));
            let n = cross(b, c);
            (a[0] * n[0] + a[1] * n[1] + a[2] * n[2]) / 6.0
        };
        self.triangles.iter().map(part).sum()
    }

    fn stl(&self) -> Vec<u8> {
        let mut bytes = Vec::with_capacity(84 + 50 * self.triangles.len());
        // A binary file must not begin with "solid".
        let mut header = [b' '; 80];
        let text = b"probe tip, lengths in nanometres, z along the axis, apex at the origin";
        header[..text.len()].copy_from_slice(text);
        bytes.extend_from_slice(&header);
        bytes.extend_from_slice(&(self.triangles.len() as u32).to_le_bytes());
        for t in &self.triangles {
            let corners = t.map(|i| self.vertices[i as usize]);
            let [a, b, c] = corners.map(|v| v.map(f64::from));
            let n = cross(less(b, a), less(c, a));
            let size = (n[0] * n[0] + n[1] * n[1] + n[2] * n[2]).sqrt();
            let normal = n.map(|x| (x / size.max(f64::MIN_POSITIVE)) as f32);
            for x in normal.iter().chain(corners.iter().flatten()) {
                bytes.extend_from_slice(&x.to_le_bytes());
            }
            bytes.extend_from_slice(&[0, 0]);
        }
        bytes
    }

    fn ply(&self) -> Vec<u8> {
        let mut bytes = format!(
            "ply\nformat binary_little_endian 1.0\n\
             comment probe tip, lengths in nanometres, z along the axis, apex at the origin\n\
             element vertex {}\nproperty float x\nproperty float y\nproperty float z\n\
             element face {}\nproperty list uchar int vertex_indices\nend_header\n",
            self.vertices.len(),
            self.triangles.len()
        )
        .into_bytes();
        for x in self.vertices.iter().flatten() {
            bytes.extend_from_slice(&x.to_le_bytes());
        }
        for t in &self.triangles {
            bytes.push(3);
            for i in t {
                bytes.extend_from_slice(&i.to_le_bytes());
            }
        }
        bytes
    }
}

fn sides([a, b, c]: [u32; 3]) -> [[u32; 2]; 3] {
    [[a, b], [b, c], [c, a]]
}

fn less(a: [f64; 3], b: [f64; 3]) -> [f64; 3] {
    [a[0] - b[0], a[1] - b[1], a[2] - b[2]]
}

fn cross(a: [f64; 3], b: [f64; 3]) -> [f64; 3] {
    [
        a[1] * b[2] - a[2] * b[1],
        a[2] * b[0] - a[0] * b[2],
        a[0] * b[1] - a[1] * b[0],
    ]
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::Array2;
    use std::collections::HashMap;

    /// A pyramid of slope 2 over 21 x 11 cells, skew so that a mix-up of axes shows.
    fn pyramid() -> (Array2<f32>, Pitch) {
        let pitch = Pitch { x: 1.0, y: 2.0 };
        let shape = Array2::from_shape_fn((11, 21), |(r, c)| {
            let (x, y) = (c as f64 - 10.0, (r as f64 - 5.0) * 2.0);
            let deep = (2.0 * x.abs()).max(2.0 * y.abs()) + if x > 0.0 { x } else { 0.0 };
            -deep as f32
        });
        (shape, pitch)
    }

    /// Every side of a closed surface is run along once each way.
    fn is_closed(mesh: &Mesh) -> bool {
        let mut count: HashMap<[u32; 2], i32> = HashMap::new();
        for [u, v] in mesh.triangles.iter().flat_map(|t| sides(*t)) {
            *count.entry([u, v]).or_default() += 1;
        }
        count
            .iter()
            .all(|([u, v], n)| *n == 1 && count.get(&[*v, *u]) == Some(&1))
    }

    #[test]
    fn a_box_has_its_volume_and_a_tip_is_closed() {
        // A flat top at 0 over 4 x 3 pitches, base one pitch (the greater) below: 4 x 6 x 2.
        let flat = Array2::zeros((4, 5));
        let mesh = Mesh::closed(flat.view(), Pitch { x: 1.0, y: 2.0 }).unwrap();
        assert!((mesh.volume_nm3() - 48.0).abs() < 1e-9);
        assert!(is_closed(&mesh));
        let (shape, pitch) = pyramid();
        let mesh = Mesh::closed(shape.view(), pitch).unwrap();
        assert!(is_closed(&mesh));
        assert!(!is_closed(&Mesh::open(shape.view(), pitch).unwrap()));
        // Not mirrored: the steeper side lies towards +x, row 0 towards +y.
        let at = |x: f32, y: f32| {
            mesh.vertices
                .iter()
                .find(|v| v[0] == x && v[1] == y)
                .unwrap()[2]
        };
        assert_eq!((at(10.0, 0.0), at(-10.0, 0.0)), (-30.0, -20.0));
        assert_eq!(at(0.0, 10.0), shape[[0, 10]]);
        assert_eq!(at(0.0, 0.0), 0.0);
    }

    /// Paraboloid over a square of side 2 L: `4 L^2 (base - L^2 / (3 R))`, closed form.
    #[test]
    fn the_volume_below_a_paraboloid() {
        let (half, radius) = (40, 20.0);
        let shape = Array2::from_shape_fn((81, 81), |(r, c)| {
            let (x, y) = (0.5 * (c as f64 - 40.0), 0.5 * (r as f64 - 40.0));
            -((x * x + y * y) / (2.0 * radius)) as f32
        });
        let mesh = Mesh::closed(shape.view(), Pitch::square(0.5)).unwrap();
        let side = 0.5 * f64::from(half);
        let base = side * side / radius + 0.5;
        let exact = 4.0 * side * side * (base - side * side / (3.0 * radius));
        assert!(
            (mesh.volume_nm3() / exact - 1.0).abs() < 1e-3,
            "{}",
            mesh.volume_nm3()
        );
    }

    #[test]
    fn cells_outside_the_tip_leave_a_closed_solid_and_nothing_is_refused() {
        let (mut shape, pitch) = pyramid();
        for ((r, c), p) in shape.indexed_iter_mut() {
            if r.abs_diff(5) + c.abs_diff(10) > 7 {
                *p = f32::NEG_INFINITY;
            }
        }
        let mesh = Mesh::closed(shape.view(), pitch).unwrap();
        assert!(is_closed(&mesh));
        assert!(mesh.vertices.iter().flatten().all(|x| x.is_finite()));
        let error = Mesh::closed(Array2::zeros((1, 1)).view(), pitch).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Data);
    }

    #[test]
    fn files_read_back_to_the_mesh() {
        let (shape, pitch) = pyramid();
        let mesh = Mesh::closed(shape.view(), pitch).unwrap();
        let folder = tempfile::tempdir().unwrap();
        let path = |name: &str| folder.path().join(name);
        write_mesh(&path("tip.stl"), &mesh).unwrap();
        write_mesh(&path("tip.ply"), &mesh).unwrap();
        assert!(write_mesh(&path("tip.obj"), &mesh).is_err());
        let float = |b: &[u8]| f32::from_le_bytes([b[0], b[1], b[2], b[3]]);

        let stl = std::fs::read(path("tip.stl")).unwrap();
        assert!(!stl.starts_with(b"solid") && stl[..80].windows(10).any(|w| w == b"nanometres"));
        assert_eq!(stl.len(), 84 + 50 * mesh.triangles.len());
        for (record, t) in stl[84..].chunks(50).zip(&mesh.triangles) {
            for (k, &i) in t.iter().enumerate() {
                for axis in 0..3 {
                    let at = 12 + 12 * k + 4 * axis;
                    assert_eq!(float(&record[at..]), mesh.vertices[i as usize][axis]);
                }
            }
            let n = [0, 4, 8].map(|at| f64::from(float(&record[at..])));
            assert!((n[0] * n[0] + n[1] * n[1] + n[2] * n[2] - 1.0).abs() < 1e-5);
        }

        let ply = std::fs::read(path("tip.ply")).unwrap();
        let end = ply.windows(11).position(|w| w == b"end_header\n").unwrap() + 11;
        let head = std::str::from_utf8(&ply[..end]).unwrap();
        assert!(head.contains("nanometres"));
        assert!(head.contains(&format!("element face {}", mesh.triangles.len())));
        let faces = end + 12 * mesh.vertices.len();
        assert_eq!(ply.len(), faces + 13 * mesh.triangles.len());
        for (b, x) in ply[end..faces]
            .chunks(4)
            .zip(mesh.vertices.iter().flatten())
        {
            assert_eq!(float(b), *x);
        }
        let last = &ply[ply.len() - 13..];
        assert_eq!(last[0], 3);
        assert_eq!(last[1..5], mesh.triangles.last().unwrap()[0].to_le_bytes());
    }
}
