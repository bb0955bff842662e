use nalgebra::{Matrix3, Vector3};
use tarehouse_physics::{force_constants::*, supercell::*, *};
#[test]
fn scratch() {
    for name in std::fs::read_dir("/work/shared/data/tight-binding")
        .unwrap()
        .map(|e| e.unwrap().path())
        .collect::<std::collections::BTreeSet<_>>()
    {
        let t: toml::Table = std::fs::read_to_string(name.join("package.toml"))
            .unwrap()
            .parse()
            .unwrap();
        let m3 = |v: &toml::Value| {
            let r: Vec<Vec<f64>> = v
                .as_array()
                .unwrap()
                .iter()
                .map(|r| {
                    r.as_array()
                        .unwrap()
                        .iter()
                        .map(|x| x.as_float().or(x.as_integer().map(|i| i as f64)).unwrap())
                        .collect()
                })
                .collect();
            r
        };
        let c = &t["crystal"];
        let cell = m3(&c["cell_vectors"]);
        let cell = Matrix3::from_fn(|i, j| cell[i][j]);
        let el: Vec<Element> = c["elements"]
            .as_array()
            .unwrap()
            .iter()
            .map(|e| Element::from_symbol(e.as_str().unwrap()).unwrap())
            .collect();
        let pos: Vec<Vector3<f64>> = m3(&c["positions"])
            .iter()
            .map(|p| Vector3::new(p[0], p[1], p[2]))
            .collect();
        let crystal = Crystal::new(cell, el, pos, None).unwrap();
        let n = crystal.atom_count();
        let k = &t["constants"];
        let s = m3(&k["supercell"]);
        let tr = m3(&k["translations"]);
        let sc = Supercell::new(
            std::array::from_fn(|i| std::array::from_fn(|j| s[i][j] as i64)),
            tr.iter()
                .map(|p| std::array::from_fn(|j| p[j] as i64))
                .collect(),
        )
        .unwrap();
        let bytes = std::fs::read(name.join("constants.npy")).unwrap();
        let hl = u16::from_le_bytes([bytes[8], bytes[9]]) as usize + 10;
        let vals: Vec<f64> = bytes[hl..]
            .chunks(8)
            .map(|b| f64::from_le_bytes(b.try_into().unwrap()))
            .collect();
        let fi = if k["first_index"].as_str() == Some("response") {
            FirstIndex::Response
        } else {
            FirstIndex::Displaced
        };
        let fc =
            ForceConstants::from_array(sc.clone(), n, &vals, ForceConstantUnit::EvPerAngstrom2, fi)
                .unwrap();
        let mut asym = 0f64;
        for l in 0..sc.cell_count() {
            for i in 0..n {
                for j in 0..n {
                    asym = asym.max(
                        (fc.block(l, i, j) - fc.block(sc.negative(l), j, i).transpose()).amax(),
                    );
                }
            }
        }
        let (mut so, mut sd) = (0f64, 0f64);
        for i in 0..n {
            let mut a = Matrix3::zeros();
            let mut b = Matrix3::zeros();
            for l in 0..sc.cell_count() {
                for j in 0..n {
                    a += fc.block(l, i, j);
                    b += fc.block(l, j, i);
                }
            }
            so = so.max(a.amax());
            sd = sd.max(b.amax());
        }
        let im = images::PairImages::find(&crystal, &sc, 1e-3);
        let d = dynamics::Dynamics::new(&crystal, &fc, &im);
        let low = sc
            .commensurate_points()
            .iter()
            .map(|q| {
                let m = d.modes(q).unwrap();
                let skip = if q.norm() < 1e-9 {
                    let mut ov: Vec<(f64, usize)> = (0..3 * n)
                        .map(|v| {
                            let e = m.vector(v);
                            let mt: f64 = crystal.masses_u().iter().sum();
                            let mut o = 0.0;
                            for b in 0..3 {
                                let s: tarehouse_eigensolver::c64 = (0..n)
                                    .map(|i| e[3 * i + b] * (crystal.masses_u()[i] / mt).sqrt())
                                    .sum();
                                o += s.norm_sqr();
                            }
                            (o, v)
                        })
                        .collect();
                    ov.sort_by(|a, b| b.0.total_cmp(&a.0));
                    ov[..3].iter().map(|x| x.1).collect()
                } else {
                    vec![]
                };
                (0..3 * n)
                    .filter(|v| !skip.contains(v))
                    .map(|v| m.eigenvalues[v])
                    .fold(1e9, f64::min)
            })
            .fold(1e9, f64::min);
        let g = symmetry::SpaceGroup::find(&crystal, 1e-3);
        let g2 = match &g {
            Ok(g) => format!("{} {}", g.symbol, g.operations.len()),
            Err(e) => e.to_string(),
        };
        let grp = g.unwrap();
        let sym = grp.symmetrised(&crystal);
        let grp2 = symmetry::SpaceGroup::find(&sym, 1e-6).unwrap();
        let p = projection::projected(&fc, &grp);
        let pp = projection::projected(&p, &grp);
        let idem = p
            .blocks()
            .iter()
            .zip(pp.blocks())
            .map(|(a, b)| (a - b).amax())
            .fold(0.0, f64::max);
        let moved = p
            .blocks()
            .iter()
            .zip(fc.blocks())
            .map(|(a, b)| (a - b).amax())
            .fold(0.0, f64::max);
        let im2 = images::PairImages::find(&sym, &sc, 1e-3);
        let keep = grp.keeping(&sc);
        let dp = dynamics::Dynamics::new(&sym, &p, &im2);
        let q = Vector3::new(0.13, 0.27, -0.31);
        let a = dp.eigenvalues(&q).unwrap();
        let cen = keep.inversion().map(|inv| {
            let r = dynamics::Dynamics::with_inversion(&sym, &p, &im2, inv);
            let b = r.eigenvalues(&q).unwrap();
            a.iter()
                .zip(&b)
                .map(|(x, y)| (x - y).abs())
                .fold(0.0, f64::max)
        });
        let am = long_wave::AcousticMatrix::new(&dp).unwrap();
        let v = long_wave::sound_velocity_range(&am, &gamma_point::directions());
        {
            let rec = sym.reciprocal();
            let mut worst = 0f64;
            for dir in [Vector3::new(1.0, 0.3, 0.2), Vector3::new(0.1, -1.0, 0.4)] {
                let eps = 1e-3;
                let q = dir * eps;
                let ev = dp.modes(&q).unwrap();
                let qc = rec.tr_mul(&q);
                let mt: f64 = sym.masses_u().iter().sum();
                let mut ov: Vec<(f64, f64)> = (0..3 * n)
                    .map(|v| {
                        let e = ev.vector(v);
                        let mut o = 0.0;
                        for b in 0..3 {
                            let s: tarehouse_eigensolver::c64 = (0..n)
                                .map(|i| e[3 * i + b] * (sym.masses_u()[i] / mt).sqrt())
                                .sum();
                            o += s.norm_sqr();
                        }
                        (o, ev.eigenvalues[v])
                    })
                    .collect();
                ov.sort_by(|a, b| b.0.total_cmp(&a.0));
                let mut ac: Vec<f64> = ov[..3].iter().map(|x| x.1 / qc.norm_squared()).collect();
                ac.sort_by(f64::total_cmp);
                let mm = am.eigenvalues(&(qc / qc.norm()));
                println!("   {ac:?} {mm:?}");
                for k in 0..3 {
                    worst = worst.max((ac[k] - mm[k]).abs() / mm[2].abs());
                }
            }
            println!("  worst {worst:.1e}");
        }
        let mesh = qmesh::QMesh::standard(&sym, &sc, &grp, 0.2);
        let rot = projection::rotation_free(&fc, &grp, &sym, &im2, 1e-13, 60);
        println!(
            "{:<22} sd {sd:.1e} so {so:.1e} as {asym:.1e} low {:.1} | {g2} -> {} ops; idem {idem:.1e} moved {moved:.1e} real {cen:?} lin {:.1e} v {v:?} mesh {:?} {} B {} {:.0e}",
            name.file_name().unwrap().to_str().unwrap(),
            units::wavenumber_per_cm(low),
            grp2.operations.len(),
            am.linear_term,
            mesh.divisions(),
            mesh.points().len(),
            rot.steps,
            rot.relative_residual
        );
    }
}
