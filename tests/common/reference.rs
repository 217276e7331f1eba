//! The tables in tests/reference, and our names for their kernels.
#![allow(dead_code)]

/// The rows of a table, comments and head left out.
pub fn rows(name: &str) -> Vec<Vec<String>> {
    let path = format!("{}/tests/reference/{name}", env!("CARGO_MANIFEST_DIR"));
    std::fs::read_to_string(path)
        .unwrap()
        .lines()
        .filter(|l| !l.starts_with('#') && !l.is_empty())
        .skip(1)
        .map(|l| l.split(',').map(str::to_owned).collect())
        .collect()
}

/// Our name for a row of the tables; `None` for kernels that Regauge does not have.
pub fn our_name(name: &str, params: &str) -> Option<String> {
    let value = |key: &str| params.split(';').find_map(|p| p.strip_prefix(key)).map(str::to_owned);
    Some(match name {
        "nearest" | "linear" | "sinc" => name.to_owned(),
        "keys_cubic" => {
            let a = value("a=")?;
            format!(
                "keys:{}",
                match a.as_str() {
                    "-1/2" => "-0.5",
                    "-3/4" => "-0.75",
                    _ => "-1",
                }
            )
        }
        "keys_cubic6" => "keys6".into(),
        "mitchell_netravali" => "bc-spline:1/3,1/3".into(),
        "meijering_quintic" => "quintic".into(),
        "meijering_septic" => "septic".into(),
        "lagrange" => format!("lagrange:{}", value("points=")?),
        "lanczos" => format!("lanczos:{}", value("n=")?),
        "hann_sinc" => format!("hann:{}", 2 * value("n=")?.parse::<usize>().ok()?),
        "kaiser_sinc" => format!("kaiser:{},{}", 2 * value("n=")?.parse::<usize>().ok()?, value("beta=")?),
        "bspline" => format!("bspline:{}", value("degree=")?),
        "omoms" if matches!(params, "degree=3" | "degree=5") => format!("omoms:{}", value("degree=")?),
        "shifted_linear" => "shifted-linear".into(),
        _ => return None,
    })
}
