{#
    Quantile of the standard normal distribution, computed while the model compiles: Wichura 1988, algorithm AS 241 (PPND16),
    good to about 1 part in 10^16. Jinja has no logarithm, so one is built here from the series of atanh.
#}
{% macro _normal_quantile(probability) %}
    {%- set q = probability - 0.5 -%}
    {%- if q > -0.425 and q < 0.425 -%}
        {%- set r = 0.180625 - q * q -%}
        {{ return(q * spellcurve._polynomial(r, [
            3.3871328727963666080e0, 1.3314166789178437745e2, 1.9715909503065514427e3, 1.3731693765509461125e4,
            4.5921953931549871457e4, 6.7265770927008700853e4, 3.3430575583588128105e4, 2.5090809287301226727e3
        ]) / spellcurve._polynomial(r, [
            1.0, 4.2313330701600911252e1, 6.8718700749205790830e2, 5.3941960214247511077e3, 2.1213794301586595867e4,
            3.9307895800092710610e4, 2.8729085735721942674e4, 5.2264952788528545610e3
        ])) }}
    {%- endif -%}
    {%- set tail = probability if q < 0 else 1 - probability -%}
    {%- set r = (0 - spellcurve._logarithm(tail)) ** 0.5 -%}
    {%- if r <= 5 -%}
        {%- set size = spellcurve._polynomial(r - 1.6, [
            1.42343711074968357734e0, 4.63033784615654529590e0, 5.76949722146069140550e0, 3.64784832476320460504e0,
            1.27045825245236838258e0, 2.41780725177450611770e-1, 2.27238449892691845833e-2, 7.74545014278341407640e-4
        ]) / spellcurve._polynomial(r - 1.6, [
            1.0, 2.05319162663775882187e0, 1.67638483018380384940e0, 6.89767334985100004550e-1, 1.48103976427480074590e-1,
            1.51986665636164571966e-2, 5.47593808499534494600e-4, 1.05075007164441684324e-9
        ]) -%}
    {%- else -%}
        {%- set size = spellcurve._polynomial(r - 5, [
            6.65790464350110377720e0, 5.46378491116411436990e0, 1.78482653991729133580e0, 2.96560571828504891230e-1,
            2.65321895265761230930e-2, 1.24266094738807843860e-3, 2.71155556874348757815e-5, 2.01033439929228813265e-7
        ]) / spellcurve._polynomial(r - 5, [
            1.0, 5.99832206555887937690e-1, 1.36929880922735805310e-1, 1.48753612908506148525e-2, 7.86869131145613259100e-4,
            1.84631831751005468180e-5, 1.42151175831644588870e-7, 2.04426310338993978564e-15
        ]) -%}
    {%- endif -%}
    {{ return(0 - size if q < 0 else size) }}
{% endmacro %}


{# Coefficients from the constant upwards. #}
{% macro _polynomial(x, coefficients) %}
    {%- set sum = namespace(value=0.0) -%}
    {%- for coefficient in coefficients | reverse -%}
        {%- set sum.value = sum.value * x + coefficient -%}
    {%- endfor -%}
    {{ return(sum.value) }}
{% endmacro %}


{# Natural logarithm of a positive number. #}
{% macro _logarithm(x) %}
    {%- set state = namespace(mantissa=x * 1.0, exponent=0, sum=0.0) -%}
    {%- for step in range(1100) if state.mantissa < 0.70710678118654752440 or state.mantissa >= 1.41421356237309504880 -%}
        {%- if state.mantissa < 1 -%}
            {%- set state.mantissa = state.mantissa * 2 -%}
            {%- set state.exponent = state.exponent - 1 -%}
        {%- else -%}
            {%- set state.mantissa = state.mantissa / 2 -%}
            {%- set state.exponent = state.exponent + 1 -%}
        {%- endif -%}
    {%- endfor -%}
    {%- set z = (state.mantissa - 1) / (state.mantissa + 1) -%}
    {%- for k in range(24, -1, -1) -%}
        {%- set state.sum = state.sum * z * z + 1.0 / (2 * k + 1) -%}
    {%- endfor -%}
    {{ return(2 * z * state.sum + state.exponent * 0.69314718055994530942) }}
{% endmacro %}
