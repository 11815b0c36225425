-- Chance without random(): numbers that depend on nothing but a row's key and a salt.
--
-- The engine's hash() may give other values in another version, so the mixing is plain integer
-- arithmetic: the 32-bit xor-shift-multiply permutation whose shifts and constants are published in
-- the README of github.com/skeeto/hash-prospector (public domain). The product of two 32-bit
-- numbers fits a UBIGINT exactly; masking keeps the low half, as a 32-bit multiplication would.

CREATE OR REPLACE TEMP MACRO larkmoor_folded(word, places) AS
    xor(word, word >> places);

CREATE OR REPLACE TEMP MACRO larkmoor_product(word, factor) AS
    (word * factor) & 4294967295::UBIGINT;

CREATE OR REPLACE TEMP MACRO larkmoor_mixed(word) AS
    larkmoor_folded(
        larkmoor_product(
            larkmoor_folded(
                larkmoor_product(larkmoor_folded(word, 15), 739982445::UBIGINT),    -- 0x2c1b3c6d
                12),
            695872825::UBIGINT),                                                    -- 0x297a2d39
        15);

-- In the open interval (0, 1): never so near an end that a normal quantile runs away.
CREATE OR REPLACE TEMP MACRO larkmoor_uniform(key, salt) AS
    (larkmoor_mixed(xor(key, salt::UBIGINT))::DOUBLE + 0.5e0) / 4294967296e0;

CREATE OR REPLACE TEMP MACRO larkmoor_whole(key, salt, below) AS
    (larkmoor_mixed(xor(key, salt::UBIGINT)) % below::UBIGINT)::INTEGER;

-- Normal quantile: Wichura, M. J. (1988), Algorithm AS 241 (PPND16), Applied Statistics 37, 477-484,
-- good to about 1 part in 10^16. Its third branch, for tails below 1.4e-11, is left out: a 32-bit
-- uniform never gets nearer to 0 or 1 than 1.1e-10.

CREATE OR REPLACE TEMP MACRO larkmoor_normal_middle(q, r) AS
    q * (((((((2.5090809287301226727e3 * r + 3.3430575583588128105e4) * r
        + 6.7265770927008700853e4) * r + 4.5921953931549871457e4) * r
        + 1.3731693765509461125e4) * r + 1.9715909503065514427e3) * r
        + 1.3314166789178437745e2) * r + 3.3871328727963666080e0)
    / (((((((5.2264952788528545610e3 * r + 2.8729085735721942674e4) * r
        + 3.9307895800092710610e4) * r + 2.1213794301586595867e4) * r
        + 5.3941960214247511077e3) * r + 6.8718700749205790830e2) * r
        + 4.2313330701600911252e1) * r + 1e0);

CREATE OR REPLACE TEMP MACRO larkmoor_normal_tail(r) AS
    (((((((7.74545014278341407640e-4 * r + 2.27238449892691845833e-2) * r
        + 2.41780725177450611770e-1) * r + 1.27045825245236838258e0) * r
        + 3.64784832476320460504e0) * r + 5.76949722146069140550e0) * r
        + 4.63033784615654529590e0) * r + 1.42343711074968357734e0)
    / (((((((1.05075007164441684324e-9 * r + 5.47593808499534494600e-4) * r
        + 1.51986665636164571966e-2) * r + 1.48103976427480074590e-1) * r
        + 6.89767334985100004550e-1) * r + 1.67638483018380384940e0) * r
        + 2.05319162663775882187e0) * r + 1e0);

CREATE OR REPLACE TEMP MACRO larkmoor_normal_quantile(prob) AS
    CASE
        WHEN abs(prob - 0.5e0) <= 0.425e0
            THEN larkmoor_normal_middle(
                prob - 0.5e0, 0.180625e0 - (prob - 0.5e0) * (prob - 0.5e0))
        ELSE sign(prob - 0.5e0)
            * larkmoor_normal_tail(sqrt(-ln(least(prob, 1e0 - prob))) - 1.6e0)
    END;
