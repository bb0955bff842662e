//! scratch
use tarehouse_assay::*;
fn main() {
    let policy = Policy::built_in().unwrap();
    let args: Vec<String> = std::env::args().skip(1).collect();
    let base = std::path::Path::new("tests/fixtures/tight-binding");
    let mut names: Vec<_> = if args.is_empty() {
        std::fs::read_dir(base)
            .unwrap()
            .map(|e| e.unwrap().path())
            .filter(|p| p.is_dir())
            .collect()
    } else {
        args.iter().map(|a| std::path::PathBuf::from(a)).collect()
    };
    names.sort();
    for p in names {
        let m = std::fs::read(p.join("package.toml")).unwrap();
        let c = std::fs::read(p.join("constants.npy")).unwrap();
        let s = tarehouse_proto::package::decode(&m, &[("constants.npy", &c)]).unwrap();
        let t = std::time::Instant::now();
        let r = examine(&s, &policy, &Unwatched).unwrap();
        println!(
            "\n=== {} {:?} {:.2}s  n={} L={} mesh {:?}/{} {} noise {:?}",
            p.file_name().unwrap().to_str().unwrap(),
            r.verdict,
            t.elapsed().as_secs_f64(),
            s.crystal.atom_count(),
            s.constants.supercell().cell_count(),
            r.mesh.divisions,
            r.mesh.irreducible_count,
            r.crystal.space_group_symbol,
            r.noise
        );
        for x in &r.verdict_reasons {
            println!("   why: {x}");
        }
        for f in &r.findings {
            if f.severity != report::Severity::Pass || args.len() == 1 {
                println!(
                    "   {:?} {} {:?}/{:?} {} [{}] {} -- {:?}: {}",
                    f.severity,
                    f.rule.name(),
                    f.measured,
                    f.limit,
                    f.unit,
                    f.location,
                    f.message,
                    f.likely_cause,
                    f.remedy
                );
            }
        }
        for k in &r.soft_modes {
            println!(
                "   soft {:?} {:?} {:.1} raw {:.1} q{:?} n{} comm {} z {:?} alias {:?} ext {:.2} excl {:?} tr {:?}\n        {}",
                k.tag,
                k.strength,
                k.lowest_wavenumber_per_cm,
                k.raw_wavenumber_per_cm,
                k.q,
                k.point_count,
                k.commensurate,
                k.z,
                k.alias_share,
                k.external_fraction,
                k.exclusion_limit_per_cm,
                k.truncation_changes
                    .iter()
                    .map(|t| t.wavenumber_per_cm)
                    .collect::<Vec<_>>(),
                k.reason
            );
        }
        for f in r
            .free_energy
            .iter()
            .filter(|f| f.temperature_k == 300.0 || f.temperature_k == 0.0)
        {
            println!(
                "   F({}) {} {:.3} [{:.3} {:.3}] S {:.2} Cv {:.2}",
                f.temperature_k,
                f.defined,
                f.central_kj_per_mol,
                f.lower_kj_per_mol,
                f.upper_kj_per_mol,
                f.entropy_j_per_mol_k,
                f.heat_capacity_j_per_mol_k
            );
        }
    }
}
