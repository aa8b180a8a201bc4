// For scripts/dev/prove_gates.py: turns a cover into the claim that it never happens, which the prover then refutes by a trace.
(* techmap_celltype = "$cover" *)
module cover_as_assert (
    input A,
    input EN
);
    \$assert _TECHMAP_REPLACE_ (.A(!A), .EN(EN));
endmodule
