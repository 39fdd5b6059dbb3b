enum { WITH_LEVELS = 0 };
static int double_recombination(const @{prefix}_plasma *at, double electrons, double *flow)
{
    (void)at;
    (void)electrons;
    *flow = 0.0;
    return @{PREFIX}_OK;
}
