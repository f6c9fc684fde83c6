// Estimates and errors by hand in SQL: one query sums the products of all
// columns, the normal equations are solved here, a second query sums the
// products of the scores with the coefficients as literals (within each id first,
// for cluster errors). One argument, JSON:
// {file, outcome, terms, kinds, cluster, errors, threads, memory, scratch}.
// errors is "classical", "hc1", "cr1", or "sums": only read and add up.
import duckdb, { DuckDBInstance } from '@duckdb/node-api';

const task = JSON.parse(process.argv[2]);
const options = { threads: String(task.threads), temp_directory: task.scratch };
if (task.memory) options.memory_limit = task.memory;
const db = await (await DuckDBInstance.create(':memory:', options)).connect();
const start = performance.now();

const text = (s) => `'${s.replaceAll("'", "''")}'`;
const name = (s) => `"${s.replaceAll('"', '""')}"`;
const sql = {
  parquet: (f) => `read_parquet(${text(f)})`,
  csv: (f) => `read_csv(${text(f)}, auto_detect=false, header=true, delim=',', columns={` +
    task.kinds.map(([c, kind]) => `${text(c)}: ${text(kind)}`).join(', ') + '})',
}[task.file.split('.').pop()](task.file);

const k = task.terms.length + 1; // with the constant
const columns = [...task.terms, task.outcome];
const id = task.cluster ? `, ${name(task.cluster)} AS id` : '';
const x = (j) => (j === 0 ? null : `x${j}`); // 0 is the constant, k the outcome
const rows = `(SELECT ${columns.map((c, j) => `${name(c)}::DOUBLE AS x${j + 1}`).join(', ')}${id} FROM ${sql})`;
const first = async (query) => (await db.runAndReadAll(query)).getRows()[0].map(Number);

// outer reads the sums of products of n things as a full matrix.
const pairs = (n) => Array.from({ length: n }, (_, i) => Array.from({ length: i + 1 }, (_, j) => [i, j])).flat();
const outer = (n, sums) => {
  const m = Array.from({ length: n }, () => new Array(n));
  pairs(n).forEach(([i, j], at) => { m[i][j] = m[j][i] = sums[at]; });
  return m;
};
const times = (a, b) => a.map((row) => b[0].map((_, j) => row.reduce((s, v, i) => s + v * b[i][j], 0)));

// inverse by Cholesky; the columns are brought to length 1 first.
const inverse = (m) => {
  const n = m.length, d = m.map((row, i) => Math.sqrt(row[i])), l = m.map((row) => row.map(() => 0));
  for (let i = 0; i < n; i++) {
    for (let j = 0; j <= i; j++) {
      let s = m[i][j] / d[i] / d[j];
      for (let h = 0; h < j; h++) s -= l[i][h] * l[j][h];
      l[i][j] = i === j ? Math.sqrt(s) : s / l[j][j];
    }
  }
  const w = l.map((row) => row.map(() => 0)); // l^-1
  for (let j = 0; j < n; j++) {
    for (let i = j; i < n; i++) {
      let s = i === j ? 1 : 0;
      for (let h = j; h < i; h++) s -= l[i][h] * w[h][j];
      w[i][j] = s / l[i][i];
    }
  }
  return m.map((_, i) => m.map((_, j) => w.reduce((s, row) => s + row[i] * row[j], 0) / d[i] / d[j]));
};

const out = { notes: { engine: duckdb.version() } };
if (task.errors === 'sums') {
  const [n, ...sums] = await first(`SELECT count(*), ${columns.map((_, j) => `sum(x${j + 1})`).join(', ')} FROM ${rows}`);
  Object.assign(out, { rows: n, sums });
} else {
  const product = ([i, j]) => (i === 0 ? 'count(*)' : `sum(${[x(i), x(j)].filter(Boolean).join('*')})`);
  const gram = outer(k + 1, await first(`SELECT ${pairs(k + 1).map(product).join(', ')} FROM ${rows}`));
  const n = gram[0][0];
  const bread = inverse(gram.slice(0, k).map((row) => row.slice(0, k)));
  const beta = times(bread, gram.slice(0, k).map((row) => [row[k]])).map((row) => row[0]);
  let v;
  if (task.errors === 'classical') {
    const ss = gram[k][k] - beta.reduce((s, b, j) => s + b * gram[j][k], 0);
    v = bread.map((row) => row.map((a) => (a * ss) / (n - k)));
  } else {
    const fitted = beta.map((b, j) => (j === 0 ? b.toExponential() : `(${b.toExponential()})*x${j}`)).join(' + ');
    const scores = beta.map((_, j) => (j === 0 ? 'e AS s0' : `e*x${j} AS s${j}`)).join(', ');
    let from = `(SELECT ${scores}${id && ', id'} FROM (SELECT *, x${k} - (${fitted}) AS e FROM ${rows}))`;
    if (task.errors === 'cr1') {
      from = `(SELECT ${beta.map((_, j) => `sum(s${j}) AS s${j}`).join(', ')} FROM ${from} GROUP BY id)`;
    }
    const [groups, ...sums] = await first(`SELECT count(*), ${pairs(k).map(([i, j]) => `sum(s${i}*s${j})`).join(', ')} FROM ${from}`);
    const factor = task.errors === 'cr1' ? (groups / (groups - 1)) * ((n - 1) / (n - k)) : n / (n - k);
    v = times(times(bread, outer(k, sums)), bread).map((row) => row.map((a) => a * factor));
    if (task.errors === 'cr1') out.notes.groups = groups;
  }
  Object.assign(out, { rows: n, beta, se: v.map((row, j) => Math.sqrt(row[j])) });
}
out.seconds = (performance.now() - start) / 1000;
console.log(JSON.stringify(out));
process.exit(0);
