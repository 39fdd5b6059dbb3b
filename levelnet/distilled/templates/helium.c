
/* Helium: an ion with the power series of its kept levels, laid out as those of hydrogen are. Place,
   series and solver stand a second time here: those of hydrogen have its sizes as constants and take
   changed constants, and stay as they are in the code of a table without helium; those below serve
   ions of any size and subtract nothing. */
enum { MOST_KEPT = @{most_kept}, MOST_PAIRS = @{most_pairs}, HE1_LINES = @{n_lines} };
/* Largest |ln u| of light, so that its products with rates stay within the doubles. */
static const double BRIGHTEST = 600.0;

typedef struct {
    int kept, pairs, cells_x, cells_y, terms;
    double x_low, x_high, y_low, y_high;
    const double *equilibrium, *exchange, *departure;
    const int *lower, *upper;
    const double *barrier_k, *rise_k, *log_weight_ratio;
    const double *log_weight, *energy_k, *saha_offset, *ionization_k;
} stage;

typedef struct {
    double recombination[MOST_KEPT], photoionization[MOST_KEPT], down[MOST_PAIRS], up[MOST_PAIRS];
} logarithms;

static int unchanged(const @{prefix}_changes *changes)
{
    return fabs(changes->fine_structure) <= 0.0 && fabs(changes->electron_mass) <= 0.0;
}

static double series(const double *coefficient, int terms, double t)
{
    double value = coefficient[terms - 1];
    for (int k = terms - 2; k >= 0; --k) value = value * t + coefficient[k];
    return value;
}

static int stage_place(const stage *of, double radiation_k, double matter_k, double *x, double *y)
{
    const double hottest = radiation_k > HOTTEST_K ? radiation_k : HOTTEST_K;
    if (!(radiation_k > 0.0)) return @{PREFIX}_RADIATION_TEMPERATURE;
    *x = log(radiation_k);
    if (!within(*x, of->x_low, of->x_high)) return @{PREFIX}_RADIATION_TEMPERATURE;
    if (!(matter_k > 0.0)) return @{PREFIX}_TEMPERATURE_RATIO;
    *y = log(matter_k / radiation_k);
    if (!within(*y, of->y_low, of->y_high)) return @{PREFIX}_TEMPERATURE_RATIO;
    return matter_k <= hottest * (1.0 + 1e-12) ? @{PREFIX}_OK : @{PREFIX}_MATTER_TEMPERATURE;
}

static int stage_logarithms(const stage *of, double radiation_k, double matter_k, logarithms *found)
{
    double x, y;
    const int status = stage_place(of, radiation_k, matter_k, &x, &y);
    if (status) return status;
    const place in_x = locate(x, of->x_low, of->x_high, of->cells_x);
    const place in_y = locate(y, of->y_low, of->y_high, of->cells_y);
    const int terms = of->terms;
    for (int i = 0; i < of->kept; ++i) {
        const double *cell =
            of->departure +
            (ptrdiff_t)((in_x.cell * of->cells_y + in_y.cell) * of->kept + i) * terms * terms;
        const double alone =
            series(of->equilibrium + (in_x.cell * of->kept + i) * terms, terms, in_x.t);
        double more = 0.0;
        for (int k = terms - 1; k >= 0; --k)
            more = more * in_x.t + series(cell + k * terms, terms, in_y.t);
        found->recombination[i] = alone + y * more;
        found->photoionization[i] =
            alone - (of->saha_offset[i] - 1.5 * x + of->ionization_k[i] / radiation_k);
    }
    for (int p = 0; p < of->pairs; ++p) {
        const double down =
            series(of->exchange + (in_x.cell * of->pairs + p) * terms, terms, in_x.t);
        found->down[p] = found->up[p] = -HUGE_VAL;
        if (down <= NEVER) continue;
        found->down[p] = down - of->barrier_k[p] / radiation_k;
        found->up[p] = found->down[p] + of->log_weight_ratio[p] - of->rise_k[p] / radiation_k;
    }
    return @{PREFIX}_OK;
}
@{stages}
/* Kept levels of one ion in the quasi-steady state: rates in 1/s, losses to the ground state, what
   they take from it beyond equilibrium, and how far they are from Boltzmann equilibrium with it. */
typedef struct {
    double rate[MOST_KEPT][MOST_KEPT], photo[MOST_KEPT], loss[MOST_KEPT], excess[MOST_KEPT];
    double departure[MOST_KEPT];
} balance;

/* Rate from its ln; 0 long before products of rates leave the doubles. */
static double rate_of(double log_rate)
{
    return log_rate > -300.0 ? exp(log_rate) : 0.0;
}

/* Elimination without a single subtraction (Grassmann, Taksar & Heyman 1985, Oper. Res. 33, 1107);
   `total` receives the exits. */
static void eliminate(int n, balance *of, double loss[MOST_KEPT], double photo[MOST_KEPT],
                      double total[MOST_KEPT])
{
    for (int i = 0; i < n; ++i) {
        loss[i] = of->loss[i];
        photo[i] = of->photo[i];
    }
    for (int m = n - 1; m >= 0; --m) {
        total[m] = loss[m] + photo[m];
        for (int j = 0; j < m; ++j) total[m] += of->rate[m][j];
        for (int i = 0; i < m; ++i) {
            const double part = of->rate[i][m] / total[m];
            loss[i] += part * loss[m];
            photo[i] += part * photo[m];
            for (int j = 0; j < m; ++j)
                if (j != i) of->rate[i][j] += part * of->rate[m][j];
        }
    }
}

/* Departures from what enters each level, with the eliminated rates. */
static void depart(int n, balance *of, const double total[MOST_KEPT])
{
    for (int m = n - 1; m > 0; --m)
        for (int i = 0; i < m; ++i)
            of->departure[i] += of->rate[m][i] * (of->departure[m] / total[m]);
    for (int m = 0; m < n; ++m) {
        for (int j = 0; j < m; ++j) of->departure[m] += of->rate[j][m] * of->departure[j];
        of->departure[m] /= total[m];
    }
}

/* Net recombinations per nucleus and second; pairs = n_e n_ion over the nuclei, in cm^-3. */
static int net_recombination(const stage *ion, const logarithms *rates, double radiation_k,
                             double pairs, double ground, balance *of, double *flow)
{
    const int n = ion->kept;
    double loss[MOST_KEPT], photo[MOST_KEPT], total[MOST_KEPT], source[MOST_KEPT];
    double fate[MOST_KEPT], again[MOST_KEPT];
    for (int i = 0; i < n; ++i) {
        const double capture = rates->recombination[i] + log(pairs);
        const double lift = rates->photoionization[i] + log(ground) + ion->log_weight[i] -
                            ion->energy_k[i] / radiation_k;
        source[i] = lift > capture ? exp(lift) * expm1(capture - lift)
                                   : -exp(capture) * expm1(lift - capture);
        of->photo[i] = rate_of(rates->photoionization[i]);
        of->departure[i] = source[i] + of->excess[i];
    }
    for (int p = 0; p < ion->pairs; ++p) {
        of->rate[ion->upper[p]][ion->lower[p]] = rate_of(rates->down[p]);
        of->rate[ion->lower[p]][ion->upper[p]] = rate_of(rates->up[p]);
    }
    eliminate(n, of, loss, photo, total);
    *flow = 0.0;
    for (int m = 0; m < n; ++m) {
        if (!(total[m] > 0.0)) return @{PREFIX}_SINGULAR;
        fate[m] = loss[m];
        again[m] = photo[m];
        for (int j = 0; j < m; ++j) {
            fate[m] += of->rate[m][j] * fate[j];
            again[m] += of->rate[m][j] * again[j];
        }
        fate[m] /= total[m];
        again[m] /= total[m];
        *flow += fate[m] * source[m] - again[m] * of->excess[m];
    }
    depart(n, of, total);
    return @{PREFIX}_OK;
}

/* Lines of He I: upper level, A in 1/s, tau H/n_HeI in cm^3/s, energy in K, ln of c times the cross
   section of H I in cm^3/s; and two photons. */
static const int HE1_LINE_UPPER[HE1_LINES] = {@{line_upper}};
static const double HE1_LINE_A[HE1_LINES] = {@{line_a}};
static const double HE1_LINE_DEPTH[HE1_LINES] = {@{line_depth}};
static const double HE1_LINE_ENERGY_K[HE1_LINES] = {@{line_energy_k}};
static const double HE1_LINE_CONTINUUM[HE1_LINES] = {@{line_continuum}};
enum { HE1_DECAY = @{decay}, HYDROGEN_ABSORBS = @{absorbs} };
static const double HE1_DECAY_RATE = @{decay_rate};
const int @{prefix}_he1_lit_by[@{n_lines}] = {@{lit_by}};
const double @{prefix}_he1_delay[@{n_lines}] = {@{delay}};

static double sobolev(double depth)
{
    return depth > 1e-8 ? -expm1(-depth) / depth : 1.0 - 0.5 * depth;
}
@{gains}
int @{prefix}_he1_escape(double helium_column, double hydrogen_column,
                  double radiation_temperature_k, double escape[@{n_lines}])
{
    double x, y, gain[HE1_LINES];
    if (!(positive(helium_column) && positive(hydrogen_column))) return @{PREFIX}_CONDITIONS;
    int status = stage_place(&HE1, radiation_temperature_k, radiation_temperature_k, &x, &y);
    if (status) return status;
    status = gains(log(helium_column), log(hydrogen_column), x, gain);
    if (status) return status;
    for (int k = 0; k < HE1_LINES; ++k)
        escape[k] = sobolev(HE1_LINE_DEPTH[k] * helium_column) * exp(gain[k]);
    return @{PREFIX}_OK;
}

void @{prefix}_he1_blackbody(double log_blue_side[@{n_lines}])
{
    for (int k = 0; k < HE1_LINES; ++k) log_blue_side[k] = 0.0;
}

/* ln of the sum of two numbers from their ln. */
static double add_logs(double a, double b)
{
    return (a > b ? a : b) + log1p(exp(-fabs(a - b)));
}

int @{prefix}_he1_blue_side(int line, double log_sent, double hydrogen_column_then,
                     double hydrogen_column_now, double *log_blue_side)
{
    if (!(line >= 0 && line < HE1_LINES && fabs(log_sent) <= BRIGHTEST &&
          positive(hydrogen_column_then) && positive(hydrogen_column_now)))
        return @{PREFIX}_CONDITIONS;
    const int above = @{prefix}_he1_lit_by[line];
    *log_blue_side = above < 0 ? 0.0 : log_sent;
    if (above < 0 || !HYDROGEN_ABSORBS) return @{PREFIX}_OK;
    /* The depth between the lines grows exponentially from its value at the line above, then. */
    const double start = log(hydrogen_column_then) + HE1_LINE_CONTINUUM[above];
    const double rise = log(hydrogen_column_now) + HE1_LINE_CONTINUUM[line] - start;
    const double mean =
        exp(start) * (fabs(rise) > 1e-8 ? expm1(rise) / rise : 1.0 + 0.5 * rise);
    const double depth = mean * @{prefix}_he1_delay[line];
    const double filled = -expm1(-depth);
    *log_blue_side = log_sent - depth;
    if (filled > 0.0) *log_blue_side = add_logs(*log_blue_side, log(filled));
    return @{PREFIX}_OK;
}

/* Losses of the kept levels of He I, and what they take from the ground state where the light on
   the blue side of a line is no blackbody: A S f (u - 1), f the photons per mode of a blackbody. */
static int couple(const @{prefix}_plasma *at, double column, double hydrogen_column, balance *of)
{
    double gain[HE1_LINES];
    const double kelvin = at->radiation_temperature_k;
    const int status = gains(log(column), log(hydrogen_column), log(kelvin), gain);
    if (status) return status;
    for (int i = 0; i < HE1.kept; ++i) of->loss[i] = of->excess[i] = 0.0;
    for (int k = 0; k < HE1_LINES; ++k) {
        const int i = HE1_LINE_UPPER[k];
        const double exponent = HE1_LINE_ENERGY_K[k] / kelvin, blue = at->log_blue_side[k];
        const double emitted = -1.0 / expm1(-exponent);
        const double rate = HE1_LINE_A[k] * sobolev(HE1_LINE_DEPTH[k] * column);
        of->loss[i] += rate * emitted * exp(gain[k]) +
                       rate * (exp(blue - exponent) - exp(-exponent)) * emitted;
        of->excess[i] += rate * expm1(blue) * at->neutral_helium *
                         exp(HE1.log_weight[i] - HE1.energy_k[i] / kelvin);
    }
    of->loss[HE1_DECAY] += HE1_DECAY_RATE;
    return @{PREFIX}_OK;
}

/* ln u that each line sends on: its own light where it is thick, its blue side where it is thin. */
static void send(const @{prefix}_plasma *at, double column, const balance *of, double *log_red_side)
{
    const double kelvin = at->radiation_temperature_k;
    for (int k = 0; k < HE1_LINES; ++k) {
        const int i = HE1_LINE_UPPER[k];
        const double blue = at->log_blue_side[k], exponent = HE1_LINE_ENERGY_K[k] / kelvin;
        const double level = HE1.log_weight[i] - HE1.energy_k[i] / kelvin;
        const double above = of->departure[i] / (at->neutral_helium * exp(level));
        const double departure = log1p(above > -1.0 + 1e-15 ? above : -1.0 + 1e-15);
        const double room = departure - exponent < -1e-12 ? departure - exponent : -1e-12;
        const double own = departure + log(-expm1(-exponent)) - log1p(-exp(room));
        const double depth = HE1_LINE_DEPTH[k] * column, lost = -expm1(-depth);
        log_red_side[k] = lost > 0.0 ? add_logs(own + log(lost), blue - depth) : blue;
    }
}

/* Smooth step from 0 at x = 0 to 1 at x = 1. */
static double ramp(double x)
{
    x = x < 0.0 ? 0.0 : x > 1.0 ? 1.0 : x;
    return x * x * (3.0 - 2.0 * x);
}

/* He III/He II in Saha equilibrium at T_m: ln = offset + 1.5 ln T - I/kT - ln n_e. Pull to it in
   Hubble rates, and ln of the ratio between which it takes over from the levels. */
static const double SAHA_OF_DOUBLE = @{saha_double}, REACH_OF_DOUBLE_K = @{reach_double};
static const double PULL = @{pull}, GONE = @{gone}, FADING = @{fading};
static const double COLDEST_K = @{coldest}, EBB = @{ebb};
@{second}
/* Slopes of helium, before they fade. */
static int helium_slopes(const @{prefix}_plasma *at, double electrons,
                         @{prefix}_plasma_slopes *slopes)
{
    const double nuclei = at->hydrogen_density_cm3 * at->helium_ratio;
    const double column = nuclei * at->neutral_helium / at->expansion_rate_per_s;
    const double hydrogen_column =
        at->hydrogen_density_cm3 * at->neutral_hydrogen / at->expansion_rate_per_s;
    const double singly = at->singly_ionized_helium, doubly = at->doubly_ionized_helium;
    const double charged = singly + doubly, b = log(doubly / singly);
    const double part = WITH_LEVELS ? ramp((b - GONE) / (FADING - GONE)) : 0.0;
    double first, second = 0.0;
    logarithms rates;
    balance of;
    int status = stage_logarithms(&HE1, at->radiation_temperature_k, at->matter_temperature_k, &rates);
    if (status) return status;
    status = couple(at, column, hydrogen_column, &of);
    if (status) return status;
    status = net_recombination(&HE1, &rates, at->radiation_temperature_k, electrons * singly,
                               at->neutral_helium, &of, &first);
    if (status) return status;
    send(at, column, &of, slopes->log_red_side);
    if (part > 0.0) status = double_recombination(at, electrons, &second);
    if (status) return status;
    const double pulled = PULL * at->expansion_rate_per_s *
                          (SAHA_OF_DOUBLE + 1.5 * log(at->matter_temperature_k) -
                           REACH_OF_DOUBLE_K / at->matter_temperature_k - log(electrons) - b);
    slopes->log_helium_per_s = -first / (at->neutral_helium * charged);
    slopes->log_double_per_s = (1.0 - part) * pulled;
    if (part > 0.0)
        slopes->log_double_per_s -=
            part * (second * (1.0 / doubly + 1.0 / singly) - first / singly);
    slopes->neutral_helium_per_s = first;
    slopes->doubly_ionized_helium_per_s =
        -part * second + (1.0 - part) * doubly * (singly * pulled - first) / charged;
    return @{PREFIX}_OK;
}

static int hydrogen_slopes(const @{prefix}_plasma *at, double electron_fraction,
                           @{prefix}_plasma_slopes *slopes)
{
    const @{prefix}_conditions alone = {at->hydrogen_density_cm3,
                                        electron_fraction,
                                        at->ionized_hydrogen,
                                        at->neutral_hydrogen,
                                        at->matter_temperature_k,
                                        at->radiation_temperature_k,
                                        at->expansion_rate_per_s,
                                        at->helium_ratio,
                                        {0.0, 0.0}};
    @{prefix}_slopes found;
    const int status = @{prefix}_right_hand_side(&alone, &found);
    if (status) return status;
    slopes->ionized_hydrogen_per_s = found.ionized_fraction_per_s;
    slopes->log_hydrogen_per_s =
        found.ionized_fraction_per_s / (at->ionized_hydrogen * at->neutral_hydrogen);
    slopes->matter_temperature_k_per_s = found.matter_temperature_k_per_s;
    slopes->compton_rate_per_s = found.compton_rate_per_s;
    slopes->electron_fraction = electron_fraction;
    return @{PREFIX}_OK;
}

static int allowed(const @{prefix}_plasma *at)
{
    for (int k = 0; k < HE1_LINES; ++k)
        if (!(fabs(at->log_blue_side[k]) <= BRIGHTEST)) return 0;
    return positive(at->hydrogen_density_cm3) && positive(at->helium_ratio) &&
           positive(at->ionized_hydrogen) && positive(at->neutral_hydrogen) &&
           positive(at->neutral_helium) && positive(at->singly_ionized_helium) &&
           positive(at->doubly_ionized_helium) && positive(at->expansion_rate_per_s) &&
           unchanged(&at->changes);
}

/* Whether every slope is a number within the doubles. */
static int finite(const @{prefix}_plasma_slopes *of)
{
    const double slopes[] = {of->log_hydrogen_per_s,
                             of->log_helium_per_s,
                             of->log_double_per_s,
                             of->ionized_hydrogen_per_s,
                             of->neutral_helium_per_s,
                             of->singly_ionized_helium_per_s,
                             of->doubly_ionized_helium_per_s,
                             of->matter_temperature_k_per_s,
                             of->compton_rate_per_s,
                             of->electron_fraction};
    for (size_t k = 0; k < sizeof slopes / sizeof slopes[0]; ++k)
        if (!(fabs(slopes[k]) <= 1e300)) return 0;
    for (int k = 0; k < HE1_LINES; ++k)
        if (!(fabs(of->log_red_side[k]) <= 1e300)) return 0;
    return 1;
}

int @{prefix}_plasma_right_hand_side(const @{prefix}_plasma *plasma, @{prefix}_plasma_slopes *slopes)
{
    @{prefix}_plasma_slopes found = {0};
    if (!allowed(plasma)) return @{PREFIX}_CONDITIONS;
    const double electron_fraction =
        plasma->ionized_hydrogen +
        plasma->helium_ratio *
            (plasma->singly_ionized_helium + 2.0 * plasma->doubly_ionized_helium);
    int status = hydrogen_slopes(plasma, electron_fraction, &found);
    if (status) return status;
    const double full = ramp(log(plasma->radiation_temperature_k / COLDEST_K) / EBB);
    if (full > 0.0)
        status = helium_slopes(plasma, electron_fraction * plasma->hydrogen_density_cm3, &found);
    if (status) return status;
    found.log_helium_per_s *= full;
    found.log_double_per_s *= full;
    found.neutral_helium_per_s *= full;
    found.doubly_ionized_helium_per_s *= full;
    found.singly_ionized_helium_per_s =
        -found.neutral_helium_per_s - found.doubly_ionized_helium_per_s;
    if (!finite(&found)) return @{PREFIX}_CONDITIONS;
    *slopes = found;
    return @{PREFIX}_OK;
}
