/*
@{about}
 *
 * What the functions do stands in @{prefix}.h. Compile as C99 and link the mathematics library:
 *     cc -std=c99 -O2 -c @{prefix}.c
 *
 * With x = ln T_r and y = ln(T_m/T_r), cut into cells on which t runs from -1 to 1:
 *     ln A_i(T_r, T_m) = E_i(x) + y D_i(x, y),   E_i and D_i polynomials in t of each cell.
 */
#include "@{prefix}.h"

#include <math.h>
#include <stddef.h>

enum {
    N_KEPT = @{n_kept},
    N_PAIRS = @{n_pairs},
    N_LINES = @{n_lines},
    CELLS_X = @{cells_x},
    CELLS_Y = @{cells_y},
    TERMS = @{terms} /* coefficients of a polynomial, lowest power first */
};

static const double X_LOW = @{x_low}, X_HIGH = @{x_high};
static const double Y_LOW = @{y_low}, Y_HIGH = @{y_high};
static const double HOTTEST_K = @{hottest};
/* Stands for the logarithm of an exchange rate that is zero; the result is then -infinity. */
static const double NEVER = @{never};
static const double PI = 3.14159265358979323846;

/* Kept levels: weight over that of 1s, energies over the Boltzmann constant in K, and
   ln[(g/2) (thermal wavelength at 1 K)^3 / cm^3]. */
static const double WEIGHT[N_KEPT] = {@{weight}};
static const double ENERGY_K[N_KEPT] = {@{energy_k}};
static const double IONIZATION_K[N_KEPT] = {@{ionization_k}};
static const double SAHA_OFFSET[N_KEPT] = {@{saha_offset}};

/* Pairs: positions of the levels, barrier taken out of the fit and energy difference in K, ln of
   the ratio of weights. */
static const int LOWER[N_PAIRS] = {@{lower}};
static const int UPPER[N_PAIRS] = {@{upper}};
static const double BARRIER_K[N_PAIRS] = {@{barrier_k}};
static const double RISE_K[N_PAIRS] = {@{rise_k}};
static const double LOG_WEIGHT_RATIO[N_PAIRS] = {@{log_weight_ratio}};

/* Lines to 1s: position of the upper level, A in 1/s, energy in K, wavelength in cm. */
static const int LINE_UPPER[N_LINES] = {@{line_upper}};
static const double LINE_A[N_LINES] = {@{line_a}};
static const double LINE_ENERGY_K[N_LINES] = {@{line_energy_k}};
static const double LINE_WAVELENGTH_CM[N_LINES] = {@{line_wavelength_cm}};
static const double LINE_WEIGHT_RATIO[N_LINES] = {@{line_weight_ratio}};

/* 2s-1s decay in 1/s; Compton rate over T_r^4 x_e/(1 + f_He + x_e), in 1/(s K^4); electron mass
   over that of the nucleus. */
static const double TWO_PHOTON_RATE = @{two_photon_rate};
static const double COMPTON = @{compton};
static const double MASS_RATIO = @{mass_ratio};

/* E_i: cell in x, level, power. */
static const double EQUILIBRIUM[CELLS_X * N_KEPT * TERMS] = {
@{equilibrium}
};

/* ln of downward exchange without exp(-barrier/T_r): cell in x, pair, power. */
static const double EXCHANGE[CELLS_X * N_PAIRS * TERMS] = {
@{exchange}
};

/* D_i: cell in x, cell in y, level, power of t in x, power of t in y. */
static const double DEPARTURE[CELLS_X * CELLS_Y * N_KEPT * TERMS * TERMS] = {
@{departure}
};
@{stimulation_table}
typedef struct {
    int cell;
    double t;
} place;

/* Cell and place in it; a rounding beyond an end of the range belongs to the last cell there. */
static place locate(double value, double low, double high, int cells)
{
    const double position = (value - low) * (cells / (high - low));
    place found;
    found.cell = (int)position;
    if (found.cell < 0) found.cell = 0;
    if (found.cell > cells - 1) found.cell = cells - 1;
    found.t = 2.0 * (position - found.cell) - 1.0;
    return found;
}

static int within(double value, double low, double high)
{
    return value >= low - 1e-12 && value <= high + 1e-12;
}

static double polynomial(const double *coefficient, double t)
{
    double value = coefficient[TERMS - 1];
    for (int k = TERMS - 2; k >= 0; --k) value = value * t + coefficient[k];
    return value;
}

static double polynomial_2d(const double *coefficient, double t_x, double t_y)
{
    double value = 0.0;
    for (int k = TERMS - 1; k >= 0; --k)
        value = value * t_x + polynomial(coefficient + k * TERMS, t_y);
    return value;
}

static int check_radiation(double radiation_k, double *x)
{
    if (!(radiation_k > 0.0)) return @{PREFIX}_RADIATION_TEMPERATURE;
    *x = log(radiation_k);
    return within(*x, X_LOW, X_HIGH) ? @{PREFIX}_OK : @{PREFIX}_RADIATION_TEMPERATURE;
}

static int check_matter(double radiation_k, double matter_k, double *y)
{
    const double hottest = radiation_k > HOTTEST_K ? radiation_k : HOTTEST_K;
    if (!(matter_k > 0.0)) return @{PREFIX}_TEMPERATURE_RATIO;
    *y = log(matter_k / radiation_k);
    if (!within(*y, Y_LOW, Y_HIGH)) return @{PREFIX}_TEMPERATURE_RATIO;
    return matter_k <= hottest * (1.0 + 1e-12) ? @{PREFIX}_OK : @{PREFIX}_MATTER_TEMPERATURE;
}

static void equilibrium(place in_x, double value[N_KEPT])
{
    for (int i = 0; i < N_KEPT; ++i)
        value[i] = polynomial(EQUILIBRIUM + (in_x.cell * N_KEPT + i) * TERMS, in_x.t);
}

/* Turn ln A_i at T_m = T_r into ln A_i at T_m. */
static void add_departure(place in_x, double y, double value[N_KEPT])
{
    const place in_y = locate(y, Y_LOW, Y_HIGH, CELLS_Y);
    const double *cell =
        DEPARTURE + (ptrdiff_t)(in_x.cell * CELLS_Y + in_y.cell) * N_KEPT * TERMS * TERMS;
    for (int i = 0; i < N_KEPT; ++i)
        value[i] += y * polynomial_2d(cell + i * TERMS * TERMS, in_x.t, in_y.t);
}

static void detailed_balance(double radiation_k, double x, const double recombination[N_KEPT],
                             double photoionization[N_KEPT])
{
    for (int i = 0; i < N_KEPT; ++i)
        photoionization[i] =
            recombination[i] - (SAHA_OFFSET[i] - 1.5 * x + IONIZATION_K[i] / radiation_k);
}

static void exchange(double radiation_k, place in_x, double down[N_PAIRS], double up[N_PAIRS])
{
    for (int p = 0; p < N_PAIRS; ++p) {
        down[p] = polynomial(EXCHANGE + (in_x.cell * N_PAIRS + p) * TERMS, in_x.t);
        if (down[p] <= NEVER) {
            down[p] = up[p] = -HUGE_VAL;
            continue;
        }
        down[p] -= BARRIER_K[p] / radiation_k;
        up[p] = down[p] + LOG_WEIGHT_RATIO[p] - RISE_K[p] / radiation_k;
    }
}

int @{prefix}_log_recombination(double radiation_temperature_k, double matter_temperature_k,
                                double log_recombination[@{n_kept}])
{
    double x, y;
    int status = check_radiation(radiation_temperature_k, &x);
    if (status) return status;
    status = check_matter(radiation_temperature_k, matter_temperature_k, &y);
    if (status) return status;
    const place in_x = locate(x, X_LOW, X_HIGH, CELLS_X);
    equilibrium(in_x, log_recombination);
    add_departure(in_x, y, log_recombination);
    return @{PREFIX}_OK;
}

int @{prefix}_log_photoionization(double radiation_temperature_k,
                                  double log_photoionization[@{n_kept}])
{
    double x, recombination[N_KEPT];
    const int status = check_radiation(radiation_temperature_k, &x);
    if (status) return status;
    equilibrium(locate(x, X_LOW, X_HIGH, CELLS_X), recombination);
    detailed_balance(radiation_temperature_k, x, recombination, log_photoionization);
    return @{PREFIX}_OK;
}

int @{prefix}_log_exchange(double radiation_temperature_k, double log_down[@{n_pairs}],
                           double log_up[@{n_pairs}])
{
    double x;
    const int status = check_radiation(radiation_temperature_k, &x);
    if (status) return status;
    exchange(radiation_temperature_k, locate(x, X_LOW, X_HIGH, CELLS_X), log_down, log_up);
    return @{PREFIX}_OK;
}

/* Factors of changed constants: alpha, electron mass, reduced mass, and energies of the atom. */
typedef struct {
    double alpha, electron, reduced, energy;
} factors;

static int scale(const @{prefix}_changes *changes, factors *by)
{
    by->alpha = by->electron = by->reduced = by->energy = 1.0;
    if (changes == NULL) return @{PREFIX}_OK;
    if (!(fabs(changes->fine_structure) <= 0.2 && fabs(changes->electron_mass) <= 0.2))
        return @{PREFIX}_CONDITIONS;
    by->alpha += changes->fine_structure;
    by->electron += changes->electron_mass;
    by->reduced = by->electron * (1.0 + MASS_RATIO) / (1.0 + MASS_RATIO * by->electron);
    by->energy = by->alpha * by->alpha * by->reduced;
    return @{PREFIX}_OK;
}

static int rates_at(double radiation_k, double matter_k, const factors *by,
                        @{prefix}_rates *rates)
{
    double x, y;
    radiation_k /= by->energy;
    matter_k /= by->energy;
    int status = check_radiation(radiation_k, &x);
    if (status) return status;
    status = check_matter(radiation_k, matter_k, &y);
    if (status) return status;
    const place in_x = locate(x, X_LOW, X_HIGH, CELLS_X);
    equilibrium(in_x, rates->log_recombination);
    detailed_balance(radiation_k, x, rates->log_recombination, rates->log_photoionization);
    add_departure(in_x, y, rates->log_recombination);
    exchange(radiation_k, in_x, rates->log_down, rates->log_up);
    if (by->alpha < 1.0 || by->alpha > 1.0 || by->electron < 1.0 || by->electron > 1.0) {
        const double log_capture = 2.0 * log(by->alpha) - 2.0 * log(by->reduced);
        const double log_rate = 5.0 * log(by->alpha) + log(by->reduced);
        for (int i = 0; i < N_KEPT; ++i) {
            rates->log_recombination[i] += log_capture;
            rates->log_photoionization[i] += log_rate;
        }
        for (int p = 0; p < N_PAIRS; ++p) {
            rates->log_down[p] += log_rate;
            rates->log_up[p] += log_rate;
        }
    }
    return @{PREFIX}_OK;
}

int @{prefix}_log_rates(double radiation_temperature_k, double matter_temperature_k,
                        const @{prefix}_changes *changes, @{prefix}_rates *rates)
{
    factors by;
    const int status = scale(changes, &by);
    if (status) return status;
    return rates_at(radiation_temperature_k, matter_temperature_k, &by, rates);
}

static double escape_probability(double depth)
{
@{escape}
}
@{stimulation_function}
/* Rates to the ground state out of each kept level, in 1/s. */
static void exits(const @{prefix}_conditions *at, const factors *by, double loss[N_KEPT])
{
    const double reduced_k = at->radiation_temperature_k / by->energy;
    const double column = at->hydrogen_density_cm3 * at->neutral_fraction /
                          (8.0 * PI * at->expansion_rate_per_s);
    for (int i = 0; i < N_KEPT; ++i) loss[i] = 0.0;
    for (int k = 0; k < N_LINES; ++k) {
        const double rate = LINE_A[k] * pow(by->alpha, 5.0) * by->reduced;
        const double wavelength = LINE_WAVELENGTH_CM[k] / by->energy;
        const double depth = LINE_WEIGHT_RATIO[k] * rate * pow(wavelength, 3.0) * column;
        loss[LINE_UPPER[k]] +=
            rate * escape_probability(depth) / -expm1(-LINE_ENERGY_K[k] / reduced_k);
    }
    loss[0] += TWO_PHOTON_RATE * pow(by->alpha, 8.0) * by->reduced@{stimulation_factor};
}

/* Solve a x = b by elimination with row pivoting; x takes the place of b. */
static int solve(double a[N_KEPT][N_KEPT], double b[N_KEPT])
{
    for (int k = 0; k < N_KEPT; ++k) {
        int best = k;
        for (int i = k + 1; i < N_KEPT; ++i)
            if (fabs(a[i][k]) > fabs(a[best][k])) best = i;
        if (!(fabs(a[best][k]) > 0.0)) return @{PREFIX}_SINGULAR;
        for (int j = 0; j < N_KEPT; ++j) {
            const double held = a[k][j];
            a[k][j] = a[best][j];
            a[best][j] = held;
        }
        const double held = b[k];
        b[k] = b[best];
        b[best] = held;
        for (int i = k + 1; i < N_KEPT; ++i) {
            const double factor = a[i][k] / a[k][k];
            for (int j = k + 1; j < N_KEPT; ++j) a[i][j] -= factor * a[k][j];
            b[i] -= factor * b[k];
        }
    }
    for (int k = N_KEPT - 1; k >= 0; --k) {
        for (int j = k + 1; j < N_KEPT; ++j) b[k] -= a[k][j] * b[j];
        b[k] /= a[k][k];
    }
    return @{PREFIX}_OK;
}

/* Net recombinations per hydrogen nucleus and second. The unknowns are the departures of the kept
   levels from Boltzmann equilibrium with 1s at T_r, so that no large flows are subtracted. */
static int net_flow(const @{prefix}_conditions *at, const @{prefix}_rates *rates,
                    const factors *by, double *flow)
{
    const double log_pairs =
        log(at->hydrogen_density_cm3) + log(at->electron_fraction) + log(at->ionized_fraction);
    double loss[N_KEPT], matrix[N_KEPT][N_KEPT] = {{0.0}}, departure[N_KEPT];
    exits(at, by, loss);
    for (int i = 0; i < N_KEPT; ++i) {
        const double capture = rates->log_recombination[i] + log_pairs;
        const double lift = rates->log_photoionization[i] + log(at->neutral_fraction * WEIGHT[i]) -
                            ENERGY_K[i] * by->energy / at->radiation_temperature_k;
        departure[i] = lift > capture ? exp(lift) * expm1(capture - lift)
                                      : -exp(capture) * expm1(lift - capture);
        matrix[i][i] = loss[i] + exp(rates->log_photoionization[i]);
    }
    for (int p = 0; p < N_PAIRS; ++p) {
        const int i = LOWER[p], j = UPPER[p];
        const double down = exp(rates->log_down[p]), up = exp(rates->log_up[p]);
        matrix[i][i] += up;
        matrix[j][j] += down;
        matrix[j][i] -= up;
        matrix[i][j] -= down;
    }
    const int status = solve(matrix, departure);
    if (status) return status;
    *flow = 0.0;
    for (int i = 0; i < N_KEPT; ++i) *flow += loss[i] * departure[i];
    return @{PREFIX}_OK;
}

static int positive(double value)
{
    return value > 0.0 && value <= 1e300;
}

int @{prefix}_right_hand_side(const @{prefix}_conditions *conditions, @{prefix}_slopes *slopes)
{
    const @{prefix}_conditions *at = conditions;
    factors by;
    @{prefix}_rates rates;
    double flow;
    if (!(positive(at->hydrogen_density_cm3) && positive(at->electron_fraction) &&
          positive(at->ionized_fraction) && positive(at->neutral_fraction) &&
          positive(at->expansion_rate_per_s) && at->helium_ratio >= 0.0 &&
          at->helium_ratio <= 1e300))
        return @{PREFIX}_CONDITIONS;
    int status = scale(&at->changes, &by);
    if (status) return status;
    status = rates_at(at->radiation_temperature_k, at->matter_temperature_k, &by, &rates);
    if (status) return status;
    status = net_flow(at, &rates, &by, &flow);
    if (status) return status;
    slopes->ionized_fraction_per_s = -flow;
    slopes->compton_rate_per_s = COMPTON * pow(by.alpha, 2.0) * pow(by.electron, -3.0) *
                                 pow(at->radiation_temperature_k, 4.0) * at->electron_fraction /
                                 (1.0 + at->helium_ratio + at->electron_fraction);
    slopes->matter_temperature_k_per_s =
        -2.0 * at->expansion_rate_per_s * at->matter_temperature_k +
        slopes->compton_rate_per_s * (at->radiation_temperature_k - at->matter_temperature_k);
    return @{PREFIX}_OK;
}
@{helium_source}