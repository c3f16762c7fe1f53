"""Examples of keys as a config writes them, for messages and for `mufitter explain`."""

from __future__ import annotations

__all__ = ["EXAMPLES"]

EXAMPLES = {
    "sample.table": "table: survey.csv",
    "sample.columns": "columns: {redshift: zHD, redshift_helio: zHEL, distance_modulus: MU, group: survey}",
    "sample.keep": "keep: {redshift: [0.01, 2.3]}",
    "sample.uncertainty": "uncertainty: [{sigma: MUERR}, {covariance: systematics.txt, label: calibration}]",
    "model": "model: flat_lcdm",
    "parameters": "parameters: {omega_m: {uniform: [0, 1]}, H0: 70}",
    "sampling": "sampling: {target_ess: 10000, seed: 20261201}",
    "run_folder": "run_folder: runs/flat_lcdm",
    "variants": "variants: [{name: flat, model: flat_lcdm}, {name: curved, model: curved_lcdm}]",
    "figures": "figures: {only: [corner, history], width: single, formats: [pdf], style: journal.mplstyle}",
    "labels": r"labels: {omega_m: '\Omega_{\mathrm{m},0}'}",
}
