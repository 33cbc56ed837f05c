//! The field file of a run, the stream-function file, the cleaned field.

use ndarray::Array2;

use super::ReportContext;
use super::summary::zero_in_words;
use crate::analysis::{Check, FittedFlow};
use crate::field::{Sigma, Thickness};
use crate::io::field_file::{FieldFile, Variable, VariableData};

fn variable(name: &str, data: Array2<f64>, units: String, long_name: &str) -> Variable {
    Variable {
        name: name.to_owned(),
        data: VariableData::F64(data),
        units,
        long_name: long_name.to_owned(),
        standard_name: None,
        attributes: vec![("ancillary_variables".to_owned(), "flag".to_owned())],
    }
}

fn flags(flow: &FittedFlow) -> Variable {
    Variable {
        name: "flag".to_owned(),
        data: VariableData::Flags(flow.flags.mapv(|f| f.0)),
        units: "1".to_owned(),
        long_name: "what this node is".to_owned(),
        standard_name: None,
        attributes: Vec::new(),
    }
}

fn file(flow: &FittedFlow, context: &ReportContext, variables: Vec<Variable>) -> FieldFile {
    FieldFile {
        grid: flow.used.grid().clone(),
        units: context.units.clone(),
        time: flow.measured.frame.time,
        variables,
        attributes: vec![
            ("title".to_owned(), "planar velocity field and its stream function".to_owned()),
            ("source".to_owned(), format!("isopsi {}", env!("CARGO_PKG_VERSION"))),
            ("sign_convention".to_owned(), context.sign_convention().to_owned()),
            ("zero_of_psi".to_owned(), zero_in_words(flow)),
        ],
    }
}

fn psi(flow: &FittedFlow, context: &ReportContext) -> Array2<f64> {
    flow.surface_psi().mapv(|p| context.psi_sign * p)
}

fn psi_unit(flow: &FittedFlow, context: &ReportContext) -> String {
    context.units.psi(flow.used.domain.thickness == Thickness::Uniform)
}

/// `field.h5`: everything at the nodes.
pub fn field_file(flow: &FittedFlow, check: &Check, context: &ReportContext) -> FieldFile {
    let units = &context.units;
    let (u, v) = (&flow.measured.u, &flow.measured.v);
    let mut variables = vec![
        variable("u", u.clone(), units.velocity(), "velocity along x, as measured"),
        variable("v", v.clone(), units.velocity(), "velocity along y, as measured"),
        variable("u_fit", flow.u_fit.clone(), units.velocity(), "velocity along x of the stream function"),
        variable("v_fit", flow.v_fit.clone(), units.velocity(), "velocity along y of the stream function"),
    ];
    if let Some((su, sv)) = sigma_arrays(flow) {
        variables.push(variable("sigma_u", su, units.velocity(), "standard uncertainty of u (k = 1)"));
        variables.push(variable("sigma_v", sv, units.velocity(), "standard uncertainty of v (k = 1)"));
    }
    variables.push(flags(flow));
    let map = &check.map;
    variables.push(variable("divergence", map.divergence.clone(), units.rate(), "divergence of the measured field"));
    if flow.used.sigma != Sigma::Unknown {
        let z = map.divergence_z(1.0);
        variables.push(variable("divergence_z", z, "1".to_owned(), "divergence over its standard uncertainty"));
    }
    variables.push(variable("vorticity", map.vorticity.clone(), units.rate(), "vorticity, counter-clockwise positive"));
    variables.push(variable("psi", psi(flow, context), psi_unit(flow, context), "stream function"));
    variables.push(variable("residual_u", u - &flow.u_fit, units.velocity(), "measured minus fitted u"));
    variables.push(variable("residual_v", v - &flow.v_fit, units.velocity(), "measured minus fitted v"));
    file(flow, context, variables)
}

/// The stream-function file: psi with the fitted velocity and flags.
pub fn psi_file(flow: &FittedFlow, context: &ReportContext) -> FieldFile {
    let units = &context.units;
    let variables = vec![
        variable("psi", psi(flow, context), psi_unit(flow, context), "stream function"),
        variable("u_fit", flow.u_fit.clone(), units.velocity(), "velocity along x of the stream function"),
        variable("v_fit", flow.v_fit.clone(), units.velocity(), "velocity along y of the stream function"),
        flags(flow),
    ];
    file(flow, context, variables)
}

/// The cleaned field: measured vectors that passed the screening, fitted ones in their place and in narrow gaps; flags beside.
pub fn clean_file(flow: &FittedFlow, context: &ReportContext) -> FieldFile {
    let units = &context.units;
    let filled = flow.filled();
    let mut variables = vec![
        variable("u", filled.u, units.velocity(), "velocity along x, screened and filled"),
        variable("v", filled.v, units.velocity(), "velocity along y, screened and filled"),
    ];
    if let Some((su, sv)) = sigma_arrays(flow) {
        variables.push(variable("sigma_u", su, units.velocity(), "standard uncertainty of u (k = 1)"));
        variables.push(variable("sigma_v", sv, units.velocity(), "standard uncertainty of v (k = 1)"));
    }
    variables.push(flags(flow));
    file(flow, context, variables)
}

/// Declared sigma at every measured node, NaN elsewhere; `None` when not declared.
fn sigma_arrays(flow: &FittedFlow) -> Option<(Array2<f64>, Array2<f64>)> {
    if flow.measured.sigma == Sigma::Unknown {
        return None;
    }
    let build = |of_u: bool| {
        Array2::from_shape_fn(flow.measured.valid.dim(), |(j, i)| match flow.measured.sigma.at(j, i) {
            Some((u, v)) if flow.measured.valid[[j, i]] => {
                if of_u {
                    u
                } else {
                    v
                }
            }
            _ => f64::NAN,
        })
    };
    Some((build(true), build(false)))
}
