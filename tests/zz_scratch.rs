use fallowband::detection::statistics::{weights::*, welch::*, quadratic::*};
use fallowband::detection::window::Window;
#[test]
fn scratch() {
    let text = include_str!("reference/welch_exact_tail.csv");
    let mut worst = 0.0f64;
    for line in text.lines().filter(|l| !l.starts_with('#')).skip(1) {
        let f: Vec<&str> = line.split(',').collect();
        let w = if f[0]=="hann" { Window::Hann } else { Window::BlackmanHarris };
        let ov: usize = f[1].parse().unwrap(); let k: usize = f[2].parse().unwrap();
        let n = 4096; let hop = n - n*ov/100;
        let mut ws = Weights::new(&w.values(n), hop);
        let p: f64 = f[3].parse().unwrap(); let x: f64 = f[4].parse().unwrap();
        let g = ws.energy(k, 1);
        let rel = g.upper_tail(x)/p-1.0;
        worst = worst.max(rel.abs());
        if rel.abs() > 1e-6 { println!("{line} {rel:e}"); }
    }
    println!("worst {worst:e}");
    for (w, ov) in [(Window::Hann, 50), (Window::Hann, 75), (Window::BlackmanHarris, 50), (Window::BlackmanHarris, 75), (Window::Hann, 90)] {
        let n = 1024; let hop = n - n*ov/100;
        let t = std::time::Instant::now();
        let mut ws = Weights::new(&w.values(n), hop);
        let pc = PowerCorrelation::new(&w.values(n), hop);
        let g = ws.energy(940, 14);
        let el = t.elapsed();
        println!("{w:?} {ov} {el:?} looks {} vs {}  terms {:?}", g.looks(), pc.equivalent_looks(940, &[1.0;14]), g.terms().len());
        let x = g.upper_quantile(1e-9);
        let e = GammaSum::of_looks(g.looks());
        println!("   gamma with same looks at 1e-9 quantile: {:e}, at 1e-5: {:e}", e.upper_tail(x), e.upper_tail(g.upper_quantile(1e-5)));
        // against direct
        for (k, b) in [(32, 1), (20, 14), (14, 20), (40,6), (6, 40), (3,100), (200,2)] {
            let g = ws.energy(k, b);
            let d = ws.direct(k, b);
            for p in [1e-3, 1e-6, 1e-9] {
                let x = d.upper_quantile(p);
                let r = g.upper_tail(x)/p - 1.0;
                if r.abs() > 1e-5 { println!("   {k} {b} {p:e}: {r:e}"); }
            }
        }
    }
}
