/*
@{about}
 *
 * Effective rates of hydrogen between the kept levels and the continuum, at radiation temperature
 * T_r and matter temperature T_m, and the right-hand side of ionization and matter temperature.
 * C99, double precision, no dependencies but math.h; every function is safe in threads (nothing
 * but constants is shared). Units are cgs; temperatures in K; rates come as natural logarithms,
 * since they leave the doubles in cold radiation.
 *
 * Kept levels, in the order of all arrays: @{level_names}
 * Pairs of kept levels, lower - upper:     @{pair_names}
 * Lines to the ground state:               @{line_names}
 *
 * Range: T_r from @{low_k} to @{high_k} K, T_m/T_r from @{ratio_low} to @{ratio_high}, and T_m up
 * to @{hottest_k} K or T_r, whichever is higher: collisional ionization is not in the rates.
 *
 * Every function returns @{PREFIX}_OK (0), or one of the codes below; then nothing is written.
 */
#ifndef @{PREFIX}_H
#define @{PREFIX}_H

#ifdef __cplusplus
extern "C" {
#endif

enum {
    @{PREFIX}_OK = 0,
    @{PREFIX}_RADIATION_TEMPERATURE = 1, /* T_r outside the range, or not a number */
    @{PREFIX}_TEMPERATURE_RATIO = 2,     /* T_m/T_r outside the range, or not a number */
    @{PREFIX}_MATTER_TEMPERATURE = 3,    /* T_m above the range */
    @{PREFIX}_CONDITIONS = 4,            /* a density, fraction, rate or change is not allowed */
    @{PREFIX}_SINGULAR = 5               /* a kept level has no exit at these conditions */
};

enum { @{PREFIX}_N_KEPT = @{n_kept}, @{PREFIX}_N_PAIRS = @{n_pairs} };

/* Relative changes of the constants of nature against their values in the laboratory; 0, 0: none.
   Each from -0.2 to 0.2. The range of temperatures scales by (1 + fine_structure)^2 times the change
   of the reduced mass. */
typedef struct {
    double fine_structure;
    double electron_mass;
} @{prefix}_changes;

typedef struct {
    double log_recombination[@{n_kept}];   /* ln A_i, A_i in cm^3/s */
    double log_photoionization[@{n_kept}]; /* ln B_i, B_i in 1/s */
    double log_down[@{n_pairs}];           /* ln of exchange, upper to lower, 1/s */
    double log_up[@{n_pairs}];             /* ln of exchange, lower to upper, 1/s */
} @{prefix}_rates;

/* Local conditions. All fractions are per hydrogen nucleus. The neutral fraction is asked for so
   that it need not be formed as a difference; excited atoms are negligible in it. */
typedef struct {
    double hydrogen_density_cm3;   /* all hydrogen nuclei; above 0 */
    double electron_fraction;      /* n_e/n_H; above 0 */
    double ionized_fraction;       /* n_HII/n_H; above 0 */
    double neutral_fraction;       /* n_HI/n_H; above 0 */
    double matter_temperature_k;
    double radiation_temperature_k;
    double expansion_rate_per_s;   /* H, or a third of the local divergence of velocity; above 0 */
    double helium_ratio;           /* n_He/n_H, 0 or above: shares the heat */
    @{prefix}_changes changes;
} @{prefix}_conditions;

typedef struct {
    double ionized_fraction_per_s;     /* d(n_HII/n_H)/dt; also dx_e/dt while helium rests */
    double matter_temperature_k_per_s; /* dT_m/dt = -2 H T_m + compton_rate (T_r - T_m) */
    double compton_rate_per_s;
} @{prefix}_slopes;

/* ln A_i in cm^3/s of each kept level: recombination into it, directly or through the others. */
int @{prefix}_log_recombination(double radiation_temperature_k, double matter_temperature_k,
                                double log_recombination[@{n_kept}]);

/* ln B_i in 1/s of each kept level, from A_i at T_m = T_r by detailed balance. */
int @{prefix}_log_photoionization(double radiation_temperature_k,
                                  double log_photoionization[@{n_kept}]);

/* ln of the exchange of each pair in 1/s; the upward rate by detailed balance. */
int @{prefix}_log_exchange(double radiation_temperature_k, double log_down[@{n_pairs}],
                           double log_up[@{n_pairs}]);

/* All of these at once; changes may be a null pointer: none. */
int @{prefix}_log_rates(double radiation_temperature_k, double matter_temperature_k,
                        const @{prefix}_changes *changes, @{prefix}_rates *rates);

/* Rates of change at local conditions, kept levels in the quasi-steady state.
   Lines: @{line_rule}.
   2s-1s: @{two_photon_rule}. */
int @{prefix}_right_hand_side(const @{prefix}_conditions *conditions, @{prefix}_slopes *slopes);

@{helium_header}#ifdef __cplusplus
}
#endif

#endif
