/* Floods at a new site from the saved models: the steps of the command `wrackline estimate`, in the same order.
   Areas are in km2 and flows in m3/s inside; a site is {id, area, region, attributes, upstream, downstream}. */
"use strict";

const estimateSite = (() => {
  const ROUTES = ["growth_curve", "quantile_regression", "routes_combined", "stream_transfer"];
  const TRANSFORMS = {
    none: (value) => value,
    log10: Math.log10,
    sqrt: Math.sqrt,
    log10_plus_1: (value) => Math.log10(value + 1),
  };
  const pick = (saved, values, aeps) => aeps.map((p) => values[saved.aeps.indexOf(p)]);
  const dot = (a, b) => a.reduce((sum, value, i) => sum + value * b[i], 0);
  const spread = (x, covariance) => dot(x, covariance.map((row) => dot(row, x)));
  const finite = (values) => values.every(Number.isFinite);
  const mean = (values) => values.reduce((sum, value) => sum + value, 0) / values.length;

  function valueOf(site, name) {
    return name === "area" ? site.area : (site.attributes[name] ?? NaN);
  }

  /** Columns of the regression at a site, and what to know of its attributes. */
  function place(equations, site, pool, covariance) {
    const names = equations.attributes;
    const transformed = names.map((name, i) => TRANSFORMS[equations.transforms[i]](valueOf(site, name)));
    let intercepts = [1];
    if (equations.regions.length) {
      const inside = equations.regions.map((region) => (region === pool ? 1 : 0));
      intercepts = inside.includes(1) ? inside : inside.map(() => NaN);
    }
    const columns = equations.separate ? intercepts.flatMap((own) => transformed.map((value) => own * value)) : transformed;
    const x = [...intercepts, ...columns];
    const lacking = names.filter((_, i) => !Number.isFinite(transformed[i]));
    const notes = lacking.length ? [`no value of ${lacking.join(", ")}`] : rangeNotes(equations.space, transformed, spread(x, covariance));
    return { x, notes };
  }

  function rangeNotes(space, transformed, ownSpread) {
    const at = Object.fromEntries(space.names.map((name, i) => [name, transformed[i]]));
    let notes = space.names.flatMap((name, i) => {
      if (at[name] < space.lower[i]) return [`${name} is below the gauges' range`];
      return at[name] > space.upper[i] ? [`${name} is above the gauges' range`] : [];
    });
    if (!notes.length) {
      const pairs = space.hulls.filter(([one, other, hull]) => liesOutside(hull, [at[one], at[other]])).map(([one, other]) => `${one} with ${other}`);
      if (pairs.length) notes = [`within the gauges' range one by one, but not together: ${pairs.join(", ")}`];
    }
    if (!notes.length && ownSpread > space.largest_spread) {
      notes = ["its attributes are each within the gauges' range, but not all together"];
    }
    return notes;
  }

  function liesOutside(hull, point) {
    if (hull.length < 3) return false;
    const extent = [0, 1].map((axis) => {
      const along = hull.map((corner) => corner[axis]);
      return Math.max(...along) - Math.min(...along);
    });
    const slack = 1e-6 * extent[0] * extent[1];
    const turn = (a, b, c) => (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0]);
    return hull.some((corner, i) => turn(corner, hull[(i + 1) % hull.length], point) < -slack);
  }

  function predict(equations, rows, x) {
    return {
      y: rows.map((i) => dot(x, equations.coefficients[i])),
      variance: rows.map((i) => equations.model_variance[i] + spread(x, equations.coefficient_covariance[i])),
      freedom: equations.degrees_of_freedom,
    };
  }

  function byGrowthCurve(index, pool, aeps) {
    const factors = pool ? pick(pool, pool.growth_factor, aeps) : aeps.map(() => NaN);
    const spreads = pool ? pick(pool, pool.ln_sd_new_site, aeps) : aeps.map(() => NaN);
    return {
      y: factors.map((factor) => index.y[0] + Math.log10(factor)),
      variance: spreads.map((sd) => index.variance[0] + (Math.LOG10E * sd) ** 2),
      freedom: index.freedom,
    };
  }

  function combine(routes, growth, quantile, aeps) {
    const w = routes.combination.weight_quantile_regression, v = 1 - w;
    const correlation = pick(routes, routes.combination.correlation, aeps);
    return {
      y: growth.y.map((y, i) => v * y + w * quantile.y[i]),
      variance: growth.variance.map((a, i) => {
        const b = quantile.variance[i];
        return v ** 2 * a + w ** 2 * b + 2 * w * v * correlation[i] * Math.sqrt(a * b);
      }),
      freedom: Math.min(growth.freedom, quantile.freedom),
    };
  }

  /** Carry the departure of one or two gauges on the site's stream from the region to the site. */
  function transfer(models, site, base, variance, route, aeps) {
    const limits = models.settings.regression.transfer_area_ratio;
    const share = (gauge) => {
      const ratio = site.area / gauge.area;
      return Math.max(0, 1 - Math.abs(ratio - 1) / (ratio > 1 ? limits[1] - 1 : 1 - limits[0]));
    };
    const near = [site.upstream, site.downstream]
      .map((name) => models.gauges[name])
      .filter((gauge) => gauge && route in gauge.regional)
      .map((gauge) => ({
        area: gauge.area_km2,
        y: pick(gauge, gauge.log10_flow, aeps),
        variance: pick(gauge, gauge.variance, aeps),
        regional: pick(gauge, gauge.regional[route], aeps),
      }))
      .filter((gauge) => share(gauge) > 0);
    if (!near.length) return null;
    const first = (gauges, better) => gauges.reduce((best, gauge) => (better(gauge, best) ? gauge : best));
    const smaller = near.filter((gauge) => gauge.area <= site.area), larger = near.filter((gauge) => gauge.area > site.area);
    let parts;
    if (smaller.length && larger.length) {
      const low = first(smaller, (a, b) => a.area > b.area), high = first(larger, (a, b) => a.area < b.area);
      const at = Math.log(site.area / low.area) / Math.log(high.area / low.area);
      parts = [[low, 1 - at], [high, at]];
    } else {
      const distance = (gauge) => Math.abs(Math.log(gauge.area / site.area));
      parts = [[first(near, (a, b) => distance(a) < distance(b)), 1]];
    }
    const found = aeps.map((_, p) => {
      let shift = 0, own = 0, left = 1;
      const slopes = [], shares = parts.map(([gauge]) => share(gauge));
      parts.forEach(([gauge, weight], n) => {
        const part = parts.length === 2 ? 1 : shares[n];
        const departure = 10 ** (gauge.y[p] - gauge.regional[p]);
        const factor = 1 + part * (departure - 1), slope = (weight * part * departure) / factor;
        shift += weight * Math.log10(factor);
        own += slope ** 2 * gauge.variance[p];
        left += slope ** 2 - 2 * slope * shares[n];
        slopes.push(slope);
      });
      if (parts.length === 2) left += 2 * slopes[0] * slopes[1] * Math.max(shares[0] + shares[1] - 1, 0);
      return { y: base.y[p] + shift, variance: Math.max(left, 0) * variance[p] + own };
    });
    return { y: found.map((one) => one.y), variance: found.map((one) => one.variance), freedom: base.freedom };
  }

  /** Make floods rise from often to rare by pooling neighbours that cross. */
  function order(y) {
    if (y.every((value, i) => i === 0 || value >= y[i - 1])) return [y, false];
    const blocks = [];
    for (const value of y) {
      blocks.push([value, 1]);
      while (blocks.length > 1 && blocks.at(-2)[0] > blocks.at(-1)[0]) {
        const [b, m] = blocks.pop(), [a, n] = blocks.pop();
        blocks.push([(a * n + b * m) / (n + m), n + m]);
      }
    }
    return [blocks.flatMap(([value, n]) => Array(n).fill(value)), true];
  }

  /** The route adopted for a site: the analyst's, or the stream's where it is surer, or the region's. */
  function adopt(models, id, regional, routes, notes, routeNotes) {
    const adopted = models.routes.adopted;
    for (const pin of models.adopt) {
      if (pin.target_id !== "" && pin.target_id !== id) continue;
      if (routes[pin.route] && finite(routes[pin.route].y) && finite(routes[pin.route].variance)) {
        (routeNotes[pin.route] ??= []).push(`adopted by the analyst: ${pin.why}`);
        return pin.route;
      }
      if (pin.target_id) notes.push(`the analyst's route ${pin.route} has no estimate here`);
    }
    if (!regional) {
      notes.unshift("no estimate");
      return null;
    }
    const base = routes[regional].variance.map((variance) => calibration(models, regional) ** 2 * variance);
    if (routes.stream_transfer && mean(routes.stream_transfer.variance) < mean(base)) return "stream_transfer";
    if (regional !== adopted) notes.push(`the study's route ${adopted} has no estimate here`);
    return regional;
  }

  function calibration(models, route) {
    return route === "stream_transfer" ? 1 : (models.routes.calibration[route]?.factor ?? 1);
  }

  /** What to know of a site's pool before its growth curve is used. */
  function notesOfPool(name, pool, rarest) {
    if (!pool) return ["the site is in no pool, so it has no growth curve"];
    const notes = pool.heterogeneous ? [`pool ${name} is heterogeneous`] : [];
    if (pool.station_years < 1 / rarest) {
      notes.push(`pool ${name} has ${pool.station_years} station-years, fewer than 1/AEP of the rarest floods`);
    }
    return notes;
  }

  /** The pool whose growth curve a site takes: its region's, its own, or that of the gauge most like it. */
  function poolOf(models, site) {
    if (models.pooling_method === "regions") return [site.region, []];
    const own = models.home[site.id];
    const at = models.index_flood.attributes.map((name, i) => TRANSFORMS[models.index_flood.transforms[i]](valueOf(site, name)));
    const known = Object.entries(models.gauges).filter(([, gauge]) => gauge.pool);
    if (own !== undefined || !known.length || !finite(at)) return [own ?? "", []];
    const scale = at.map((_, i) => {
      const values = known.map(([, gauge]) => gauge.place[i]), middle = mean(values);
      return Math.max(Math.sqrt(mean(values.map((value) => (value - middle) ** 2))), 1e-12);
    });
    const apart = ([, gauge]) => gauge.place.reduce((sum, value, i) => sum + ((value - at[i]) / scale[i]) ** 2, 0);
    const distances = known.map(apart);
    const [id, gauge] = known[distances.indexOf(Math.min(...distances))];
    return [gauge.pool, [`its growth curve is that of gauge ${id}, the gauge most like it`]];
  }

  /** Rows {aep, route, flow, lower, upper, se_log10, adopted, warnings} of one site, flows in the declared unit. */
  return function estimateSite(models, site, flowUnit) {
    const aeps = models.settings.aeps.targets;
    if (models.settings.pooling.regions === "one") site = { ...site, region: "all" };
    const [name, borrowed] = poolOf(models, site);
    const pool = Object.hasOwn(models.growth, name) ? models.growth[name] : null;
    const group = models.pooling_method === "regions" ? (pool ? name : "") : site.region;
    const index = place(models.index_flood, site, group, models.index_flood.coefficient_covariance[0]);
    let notes = index.notes;
    const routes = { growth_curve: byGrowthCurve(predict(models.index_flood, [0], index.x), pool, aeps) };
    if (models.quantiles) {
      const rows = aeps.map((p) => models.quantiles.aeps.indexOf(p));
      const own = place(models.quantiles, site, group, models.quantiles.coefficient_covariance[rows[0]]);
      notes = [...new Set([...notes, ...own.notes])];
      routes.quantile_regression = predict(models.quantiles, rows, own.x);
      if (models.routes.combination) routes.routes_combined = combine(models.routes, routes.growth_curve, routes.quantile_regression, aeps);
    }
    const routeNotes = {}, ofPool = notesOfPool(name, pool, Math.min(...aeps));
    if (!pool) notes.unshift(...ofPool);
    else if (ofPool.length) Object.assign(routeNotes, { growth_curve: [...ofPool], routes_combined: [...ofPool] });
    notes.push(...borrowed);
    const has = (route) => routes[route] && finite(routes[route].y) && finite(routes[route].variance);
    const regional = [models.routes.adopted, ...ROUTES].find(has);
    if (regional) {
      const factor = calibration(models, regional);
      const variance = routes[regional].variance.map((value) => factor ** 2 * value);
      const along = transfer(models, site, routes[regional], variance, regional, aeps);
      if (along) routes.stream_transfer = along;
    }
    const adopted = adopt(models, site.id, regional, routes, notes, routeNotes);
    const rows = [];
    for (const route of ROUTES.filter(has)) {
      const { y, variance, freedom } = routes[route];
      const [ordered, crossed] = order(y);
      if (crossed) (routeNotes[route] ??= []).push("floods of neighbouring AEPs crossed and were put in order");
      const warnings = [...notes, ...(routeNotes[route] ?? [])].join("; ");
      aeps.forEach((aep, p) => {
        const se = calibration(models, route) * Math.sqrt(variance[p]), reach = models.t[freedom] * se;
        const flow = (log10) => 10 ** log10 / flowUnit;
        rows.push({
          aep, route, flow: flow(ordered[p]), lower: flow(ordered[p] - reach), upper: flow(ordered[p] + reach),
          se_log10: se, adopted: route === adopted, warnings,
        });
      });
    }
    const ofAdopted = rows.find((row) => row.adopted)?.warnings.split("; ").filter(Boolean);
    return { rows, warnings: ofAdopted ?? notes, adopted };
  };
})();

/** Generalized skew at a site from the skew model, {skew, mse, how}; null where the study has none. */
function skewAtSite(model, site, grid) {
  if (!model) return null;
  if (model.skew !== null && model.skew !== undefined) return { skew: model.skew, mse: model.mse, how: "given constant" };
  if (!model.coefficients) return null;
  if (model.kind === "surface") return skewOnMap(grid, site);
  let x = [1];
  if (model.regions.length) {
    if (!model.regions.includes(site.region)) return null;
    x = model.regions.map((region) => (region === site.region ? 1 : 0));
  } else {
    const transforms = { none: (v) => v, log10: Math.log10, sqrt: Math.sqrt, log10_plus_1: (v) => Math.log10(v + 1) };
    model.attributes.forEach((name, i) => {
      x.push(transforms[model.transforms[i]](name === "area" ? site.area : (site.attributes[name] ?? NaN)));
    });
  }
  const skew = x.reduce((sum, value, i) => sum + value * model.coefficients[i], 0);
  let mse = model.model_variance;
  x.forEach((a, i) => x.forEach((b, j) => { mse += a * b * model.coefficient_covariance[i][j]; }));
  if (!Number.isFinite(skew)) return null;
  return { skew, mse, how: `model '${model.model}'` };
}

/** The value of the skew map's cell around a place. */
function skewOnMap(grid, site) {
  if (!grid || !Number.isFinite(site.longitude) || !Number.isFinite(site.latitude)) return null;
  const turn = Math.round((grid.west + (grid.columns * grid.cell) / 2 - site.longitude) / 360) * 360;
  const column = Math.floor((site.longitude + turn - grid.west) / grid.cell);
  const row = Math.floor((grid.north - site.latitude) / grid.cell);
  if (row < 0 || column < 0 || row >= grid.rows || column >= grid.columns) return null;
  const at = row * grid.columns + column;
  return grid.skew[at] === null ? null : { skew: grid.skew[at], mse: grid.mse[at], how: "cell of the skew map" };
}
