// Against the night before: how far the surface moved at each node, and what moved it. That move
// is what the sign-off judges, of the nodes near the forward; the change of a volatility at its
// strike has the forward and the roll-down in it besides.

const PARTS = ['level', 'skew', 'curvature', 'forward', 'roll', 'rest'];
const MOVES = ['level', 'skew', 'curvature', 'rest'];
const WHYS = {
  tolerance: 'beyond the tolerance',
  history: 'more than usual',
  both: 'beyond the tolerance, and more than usual'
};
const judged = page.changes.filter((c) => c.near);
function changeRows() {
  const rows = new Map();
  for (const c of page.changes) {
    const name = c.tenor || (page.expiries[c.expiry] ? page.expiries[c.expiry].label : c.date);
    if (!rows.has(name)) rows.set(name, {name, date: c.date, tenor: c.tenor, nodes: []});
    rows.get(name).nodes.push(c);
  }
  const list = [...rows.values()].sort(
      (a, b) => (a.tenor !== '') - (b.tenor !== '') || (a.date < b.date ? -1 : 1));
  list.forEach((row) => row.nodes.sort((a, b) => a.k - b.k));
  return list;
}
function changeScale() {
  const most = d3.max(judged, (c) => Math.abs(c.move)) || 1;
  // By the root, so that a large one does not pale the others.
  const step = (x) => 3 + Math.round(3 * Math.sign(x) * Math.sqrt(Math.abs(x) / most));
  return {most, step: (c) => c.near ? step(c.move) : 3};
}
function changeLines(c) {
  return [
    ['move of the surface', points(c.move) + ' vol points'],
    ['before, at this strike', vol(c.before)], ['now', vol(c.after)],
    ['change at this strike', points(c.change)]
  ]
      .concat(
          PARTS.filter((p) => isNumber(c[p])).map((p) => [p, points(c[p])]),
          isNumber(c.typical) ? [['usual move', fixed(100 * c.typical, 2)]] : [],
          c.flagged ? [['to sign off', WHYS[c.why]]] : [],
          c.near ? [] : [['not judged', 'too far from the forward']]);
}
function drawChanges(svg, width) {
  const rows = changeRows(),
        m = {top: 8, right: 8, left: 14 + 6.7 * d3.max(rows, (row) => row.name.length)},
        shade = changeScale(), stops = [], tall = 26;
  const ks =
      [...new Set(page.changes.map((c) => c.k.toFixed(3)))].map(Number).sort((a, b) => a - b);
  const most = d3.max(rows, (row) => row.nodes.length), cell = (width - m.left - m.right) / most;
  rows.forEach((row, r) => {
    const y = m.top + r * tall;
    svg.append('g')
        .attr('class', 'axis')
        .append('text')
        .attr('x', m.left - 8)
        .attr('y', y + tall / 2)
        .attr('text-anchor', 'end')
        .attr('dominant-baseline', 'central')
        .text(row.name);
    row.nodes.forEach((c, i) => {
      const x = m.left + i * cell, step = shade.step(c);
      svg.append('rect')
          .attr('class', 'cell c' + step)
          .attr('x', x)
          .attr('y', y)
          .attr('width', cell)
          .attr('height', tall);
      const dark = isDark(), strong = step === 0 || step === 6;
      const sign = c.move > 0 ? '\u25b2 ' : c.move < 0 ? '\u25bc ' : '';
      if (cell > 46)
        svg.append('text')
            .attr(
                'class',
                'cell-text ' +
                    (!c.near             ? 'far-text' :
                         strong !== dark ? 'light-text' :
                                           'dark-text'))
            .attr('x', x + cell / 2)
            .attr('y', y + tall / 2)
            .text(sign + fixed(Math.abs(100 * c.move), 2));
      if (c.flagged)
        svg.append('rect')
            .attr('class', 'ring')
            .attr('x', x + 1.5)
            .attr('y', y + 1.5)
            .attr('width', cell - 3)
            .attr('height', tall - 3);
      stops.push({
        x: x + cell / 2,
        y: y + tall / 2,
        series: r,
        name: row.name + ' at strike ' + price(c.strike),
        lines: changeLines(c),
        act: () => {
          if (page.expiries[c.expiry]) choose(page.expiries[c.expiry]);
        }
      });
    });
  });
  svg.append('g')
      .attr('class', 'axis')
      .append('text')
      .attr('class', 'unit')
      .attr('x', width - m.right)
      .attr('y', m.top + rows.length * tall + 18)
      .attr('text-anchor', 'end')
      .text(
          'nodes by strike, ' +
          (ks.length ? 'k from ' + fixed(ks[0], 2) + ' to ' + fixed(ks[ks.length - 1], 2) : ''));
  return stops;
}
function changeTable() {
  const rows = page.changes.slice().sort(
      (a, b) => b.near - a.near || b.flagged - a.flagged || Math.abs(b.move) - Math.abs(a.move));
  return {
    head: ['expiry', 'tenor', '>k', '>strike', '>before', '>now', '>change', '>move'].concat(
        PARTS.map((p) => '>' + p), ['sign-off']),
    rows: rows.map(
        (c) => [c.date, c.tenor, fixed(c.k, 3), price(c.strike), vol(c.before), vol(c.after),
                points(c.change), points(c.move)]
                   .concat(
                       PARTS.map((p) => points(c[p])),
                       [c.flagged  ? WHYS[c.why] :
                            c.near ? '' :
                                     'not judged']))
  };
}
// The part of the surface's move that is largest, in words.
function mainPart(c) {
  const known = MOVES.filter((p) => isNumber(c[p]));
  if (!known.length) return '';
  const part = known.reduce((a, b) => Math.abs(c[b]) > Math.abs(c[a]) ? b : a);
  return 'mostly ' + part + ' (' + points(c[part]) + ')';
}
const flaggedMoves = page.changes.filter((c) => c.flagged);
function largerMove(a, b) {
  return Math.abs(b.move) - Math.abs(a.move);
}
// What is beyond which bound. Without enough nights there is no usual move to speak of.
function judgement() {
  const by = (...whys) => flaggedMoves.filter((c) => whys.includes(c.why)).length;
  const wide = by('tolerance', 'both'), odd = by('history', 'both');
  const known = judged.some((c) => isNumber(c.typical));
  const moves = (n) => counted(n, 'node moves', 'nodes move');
  return (wide ? moves(wide) : 'No node moves') + ' beyond the tolerance' +
      (known ? ', ' + (odd ? count(odd) : 'none') + ' by more than usual' : '');
}
function changesSection() {
  if (!page.changes.length)
    return section(
        'changes', 'Since the night before',
        page.previous ?
            'No node can be compared with the night of ' + longDate(page.previous) + '.' :
            'There is no earlier night to compare with.');
  const rows = changeRows().length;
  const list = (flaggedMoves.length ? flaggedMoves : judged).slice().sort(largerMove).slice(0, 5);
  const figure = new Figure({
    id: 'changes-figure',
    inset: true,
    title: 'Move of the surface at each node, vol points',
    note:
        'At equal ln(K/F), less the roll-down. \u25b2 up, \u25bc down; framed: to sign off; grey: too far from the forward to be judged.',
    height: () => 8 + rows * 26 + 28,
    draw: drawChanges,
    table: changeTable
  });
  return section(
      'changes', 'Since the night before',
      judgement() + '; compared with ' +
          (page.previous ? longDate(page.previous) : 'the night before') + '.',
      plainTable(
          [
            'expiry', '>strike', '>move of the surface, vol points', 'what moved it', '>before',
            '>now', '>change at the strike'
          ],
          list.map(
              (c) =>
                  [(c.tenor || c.date), price(c.strike), points(c.move), mainPart(c), vol(c.before),
                   vol(c.after), points(c.change)])),
      figure.node);
}
