/* He II: lines to its ground state in Sobolev's treatment, and two photons from its first level. */
enum { WITH_LEVELS = 1 };
static int double_recombination(const @{prefix}_plasma *at, double electrons, double *flow)
{
    const double kelvin = at->radiation_temperature_k;
    const double column = at->hydrogen_density_cm3 * at->helium_ratio * at->singly_ionized_helium /
                          at->expansion_rate_per_s;
    logarithms rates;
    balance of = {{{0.0}}, {0.0}, {0.0}, {0.0}, {0.0}};
    const int status = stage_logarithms(&HE2, kelvin, at->matter_temperature_k, &rates);
    if (status) return status;
    of.loss[0] = @{ion_decay_rate};
    of.loss[@{ion_line_upper}] +=
        @{ion_line_a} * sobolev(@{ion_line_depth} * column) /
        -expm1(-@{ion_line_energy_k} / kelvin);
    return net_recombination(&HE2, &rates, kelvin, electrons * at->doubly_ionized_helium,
                             at->singly_ionized_helium, &of, flow);
}
