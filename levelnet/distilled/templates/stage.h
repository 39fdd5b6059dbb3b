
/* Effective rates of @{species}. Kept levels, in the order of all arrays: @{level_names}
   Pairs, lower - upper: @{pair_names} */
enum { @{PREFIX}_N_@{ION} = @{n_kept}, @{PREFIX}_N_@{ION}_PAIRS = @{n_pairs} };

typedef struct {
    double log_recombination[@{n_kept}];   /* ln A_i, A_i in cm^3/s */
    double log_photoionization[@{n_kept}]; /* ln B_i, B_i in 1/s */
    double log_down[@{n_pairs}];           /* ln of exchange, upper to lower, 1/s */
    double log_up[@{n_pairs}];             /* ln of exchange, lower to upper, 1/s */
} @{prefix}_@{ion}_rates;

/* All logarithms of rates. T_r from @{low_k} to @{high_k} K, T_m/T_r from @{ratio_low} to @{ratio_high}, T_m as above;
   changes: a null pointer or none. */
int @{prefix}_@{ion}_log_rates(double radiation_temperature_k, double matter_temperature_k,
                        const @{prefix}_changes *changes, @{prefix}_@{ion}_rates *rates);
