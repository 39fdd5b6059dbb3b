
/* P = S: hydrogen does not absorb. */
static int gains(double column, double hydrogen_column, double log_kelvin, double gain[HE1_LINES])
{
    (void)column;
    (void)hydrogen_column;
    (void)log_kelvin;
    for (int k = 0; k < HE1_LINES; ++k) gain[k] = 0.0;
    return @{PREFIX}_OK;
}
