{#
    Exact limits of a Poisson count (Garwood 1936): the lower is the quantile of the gamma distribution with shape d at half of what
    the confidence leaves, the upper that with shape d + 1 at one less that half. (Doubled, they are quantiles of chi-square.)

    Up to shape 29 they are constants, found by Newton steps while the model compiles. From 30 on the quantile is its Cornish-Fisher
    series in 1 / sqrt(shape), 17 terms of it: relative error below 1e-14 at 95% and below 1e-10 at 99.9999%.
#}

{# One limit of the count in a column of whole numbers (null gives null). side: -1 for the lower, 1 for the upper. #}
{% macro _poisson_limit(events, confidence, side) %}
    {%- set z = side * spellcurve._normal_quantile(0.5 + confidence / 2) -%}
    {%- set tail = (1 - confidence) / 2 -%}
    {%- set extra = 1 if side > 0 else 0 -%}
    {%- set above, below = spellcurve._gamma_quantile_above, spellcurve._gamma_quantile_below -%}
    {%- set cases = [] if side > 0 else ['when 0 then ' ~ spellcurve._double('0')] -%}
    {%- for shape in range(1, 30) -%}
        {%- set limit = above(shape, tail, z) if side > 0 else below(shape, tail, z) -%}
        {%- do cases.append('when ' ~ (shape - extra) ~ ' then ' ~ spellcurve._double(spellcurve._double_literal(limit))) -%}
    {%- endfor -%}
    {%- set shape = 'greatest(30, ' ~ events ~ ' + ' ~ extra ~ ')' -%}
    {%- set root = 'sqrt(' ~ spellcurve._double(shape) ~ ')' -%}
    {%- set terms = [] -%}
    {%- for term in spellcurve._gamma_quantile_terms(z) -%}
        {%- do terms.append('(' ~ spellcurve._double_literal(term) ~ ') / power(' ~ root ~ ', ' ~ loop.index0 ~ ')') -%}
    {%- endfor -%}
    {{ return(
        'case when ' ~ events ~ ' < ' ~ (30 - extra) ~ ' then case ' ~ spellcurve._integer(events) ~ ' ' ~ cases | join(' ')
        ~ ' end when ' ~ events ~ ' is not null then ' ~ shape ~ ' + ' ~ root ~ ' * (' ~ terms | join(' + ') ~ ') end'
    ) }}
{% endmacro %}


{#
    The x above which a gamma distribution of whole shape has a small share: Newton steps on the logarithm of
    exp(-x) (1 + x + … + x^(shape - 1) / (shape - 1)!). They start from Wilson and Hilferty's approximation (1931).
#}
{% macro _gamma_quantile_above(shape, share, z) %}
    {%- set state = namespace(x=shape * (1 - 1 / (9 * shape) + z / (3 * shape ** 0.5)) ** 3, step=1.0) -%}
    {%- for iteration in range(30) if state.step > 1e-9 * state.x or 0 - state.step > 1e-9 * state.x -%}
        {%- set sum = namespace(term=1.0, value=1.0) -%}
        {%- for k in range(1, shape) -%}
            {%- set sum.term = sum.term * state.x / k -%}
            {%- set sum.value = sum.value + sum.term -%}
        {%- endfor -%}
        {%- set ratio = sum.value * 2.718281828459045 ** (0 - state.x) / share -%}
        {%- set state.step = spellcurve._logarithm_in_few_steps(ratio) * sum.value / sum.term -%}
        {%- set state.x = state.x + state.step -%}
    {%- endfor -%}
    {{ return(state.x) }}
{% endmacro %}


{#
    The x below which it has a small share: Newton steps in ln(x) on the logarithm of x^shape exp(-x) / shape! times
    1 + x / (shape + 1) + x^2 / ((shape + 1) (shape + 2)) + …, of which 60 terms are enough where x < shape < 30.
#}
{% macro _gamma_quantile_below(shape, share, z) %}
    {%- set factorial = namespace(value=1.0) -%}
    {%- for k in range(2, shape + 1) -%}
        {%- set factorial.value = factorial.value * k -%}
    {%- endfor -%}
    {%- set least, root = (share * factorial.value) ** (1.0 / shape), 1 - 1 / (9 * shape) + z / (3 * shape ** 0.5) -%}
    {%- set near = shape * root ** 3 -%}
    {%- set state = namespace(x=near if near > least else least, step=1.0) -%}
    {%- for iteration in range(30) if state.step > 1e-9 or 0 - state.step > 1e-9 -%}
        {%- set sum = namespace(term=1.0, value=1.0) -%}
        {%- for k in range(1, 60) -%}
            {%- set sum.term = sum.term * state.x / (shape + k) -%}
            {%- set sum.value = sum.value + sum.term -%}
        {%- endfor -%}
        {%- set ratio = share * factorial.value * 2.718281828459045 ** state.x / state.x ** shape / sum.value -%}
        {%- set state.step = spellcurve._logarithm_in_few_steps(ratio) * sum.value / shape -%}
        {%- set state.x = state.x * 2.718281828459045 ** state.step -%}
    {%- endfor -%}
    {{ return(state.x) }}
{% endmacro %}


{# Natural logarithm of a positive number, for loops that need it often: halved by powers of two, then the series of atanh. #}
{% macro _logarithm_in_few_steps(x) %}
    {%- set state = namespace(mantissa=x if x >= 1 else 1 / x, exponent=0, sum=0.0) -%}
    {%- for power in [512, 256, 128, 64, 32, 16, 8, 4, 2, 1] -%}
        {%- if state.mantissa >= 2.0 ** power -%}
            {%- set state.mantissa = state.mantissa / 2.0 ** power -%}
            {%- set state.exponent = state.exponent + power -%}
        {%- endif -%}
    {%- endfor -%}
    {%- set z = (state.mantissa - 1) / (state.mantissa + 1) -%}
    {%- for k in range(17, -1, -1) -%}
        {%- set state.sum = state.sum * z * z + 1.0 / (2 * k + 1) -%}
    {%- endfor -%}
    {%- set size = 2 * z * state.sum + state.exponent * 0.69314718055994530942 -%}
    {{ return(size if x >= 1 else 0 - size) }}
{% endmacro %}


{#
    The terms t_0, t_1, … of the quantile shape + sqrt(shape) (t_0 + t_1 / sqrt(shape) + t_2 / shape + …) whose standard normal
    counterpart is z. Each is a polynomial in z, odd and even by turns; the coefficients come from solving
    dx/dz = normal density(z) / gamma density(x) term by term, in fractions, with Stirling's series for the gamma function.
#}
{% macro _gamma_quantile_terms(z) %}
    {%- set polynomials = [
        [1.0],
        [-0.3333333333333333, 0.3333333333333333],
        [-0.19444444444444445, 0.027777777777777776],
        [0.019753086419753086, -0.008641975308641974, -0.003703703703703704],
        [-0.011136831275720165, 0.006584362139917695, 0.0002314814814814815],
        [0.007211444248481286, -0.004521849892220263, -0.0011904761904761906, 5.878894767783657e-05],
        [0.0019713145317569185, 0.0019699536764865985, -2.9619014958521132e-05, -2.553644914756026e-05],
        [0.0006526298981717363, -0.0019049977863420935, -0.0001726108824874257, 8.37198162301043e-05, 4.899078973153047e-06],
        [0.0017720095753556973, 0.0003315300488940178, -0.00012957468509809046, -2.5886869379667732e-05, -2.428276122977769e-07],
        [-0.0012385769635511374, -0.0003422181639308517, 0.00015464459476106582, 6.401354139884852e-05, 3.1606390583680632e-06,
         -1.85406221071516e-07],
        [0.00018480123844331257, -0.00021062606246895457, -0.00010892212692274078, -1.2067700029214249e-05, 7.141944463516492e-07,
         7.542464855411896e-08],
        [-0.0004509888376840951, 0.00033242239699043496, 0.00015965487056649542, 2.584903934438905e-05, -1.2910952342610796e-06,
         -4.862830116312092e-07, -1.47216272806884e-08],
        [-0.000580699948552732, -0.00021660803036033374, -3.8088777470510184e-05, 2.3373997567293168e-06, 1.6169950999454123e-06,
         1.2597739160689628e-07, 5.159887341078076e-10],
        [0.0006639604003340528, 0.00027055607600347514, 3.5204146127751125e-05, -7.441658238208083e-06, -4.03057610274527e-06,
         -5.215193450492114e-07, -1.0727261975015052e-08, 7.32986413160022e-10],
        [-0.00024025308389214985, 1.191280264468795e-05, 2.588026549396464e-05, 9.103421322062891e-06, 1.4596007989857974e-06,
         6.134899589490101e-08, -5.3823156694394545e-09, -2.921357345635569e-10],
        [0.000449835386727579, -0.00015313216335369304, -7.531125874348814e-05, -1.9675371733794243e-05, -3.187050776764147e-06,
         -1.805735457340096e-07, 2.2228338885458432e-08, 2.8318979540274848e-09, 5.717312238897994e-11],
        [0.00048159686870936924, 0.00017527264149279576, 3.877459310945645e-05, 5.493108314496663e-06, 2.56358314487599e-07,
         -7.977786275770376e-08, -1.4366423633156926e-08, -6.665556111231443e-10, -1.5008349408791911e-12]
    ] -%}
    {%- set terms = [] -%}
    {%- for coefficients in polynomials -%}
        {%- do terms.append(spellcurve._polynomial(z * z, coefficients) * (1 if loop.index0 % 2 else z)) -%}
    {%- endfor -%}
    {{ return(terms) }}
{% endmacro %}
