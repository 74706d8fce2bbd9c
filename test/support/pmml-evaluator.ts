import { readXml, type XmlElement } from './xml-reader.js';

/**
 * Evaluates a PMML 4.4 RegressionModel by the words of the standard (Data Mining Group, dmg.org/pmml/v4-4: Regression,
 * DataDictionary, MiningSchema, Transformations, Functions), for the elements a regression export may use. It throws at
 * any other. A result is a number, or null where it is invalid.
 */
export function evaluatePmml(document: string): (row: Readonly<Record<string, unknown>>) => number | null {
  const root = readXml(document);
  if (root.name !== 'PMML' || attribute(root, 'version') !== '4.4') throw new Error('not PMML 4.4');
  if (attribute(root, 'xmlns') !== 'http://www.dmg.org/PMML-4_4')
    throw new Error('not the namespace of PMML 4.4');
  expectOrder(root, ['Header', 'DataDictionary', 'RegressionModel']);
  const dictionary = child(root, 'DataDictionary');
  const fields = dictionary.children;
  if (Number(attribute(dictionary, 'numberOfFields')) !== fields.length) throw new Error('numberOfFields');
  const names = fields.map((field) => attribute(field, 'name'));
  if (new Set(names).size !== names.length) throw new Error('a data field twice');
  const model = child(root, 'RegressionModel');
  expectOrder(model, ['MiningSchema', 'Output', 'LocalTransformations', 'RegressionTable']);
  if (attribute(model, 'functionName') !== 'regression') throw new Error('functionName');
  return (row) => {
    const values = new Map<string, number | string>();
    for (const mining of child(model, 'MiningSchema').children) {
      if (attribute(mining, 'usageType') === 'target') continue;
      const name = attribute(mining, 'name');
      const field = fields.find((one) => attribute(one, 'name') === name);
      if (field === undefined) throw new Error(`no data field ${name}`);
      const value = valueIn(field, row[name]);
      // missingValueTreatment and invalidValueTreatment
      if (
        attribute(mining, value === undefined ? 'missingValueTreatment' : 'invalidValueTreatment') !==
        'returnInvalid'
      )
        throw new Error('another treatment');
      if (value === undefined || value === null) return null;
      values.set(name, value);
    }
    for (const derived of model.children.find(({ name }) => name === 'LocalTransformations')?.children ??
      []) {
      const name = attribute(derived, 'name');
      if (values.has(name)) throw new Error(`${name} is there twice`);
      values.set(name, expression(only(derived), values));
    }
    return normalised(
      attribute(model, 'normalizationMethod'),
      linear(child(model, 'RegressionTable'), values),
    );
  };
}

/** The value of a data field: undefined where missing, null where invalid. */
function valueIn(field: XmlElement, given: unknown): number | string | null | undefined {
  if (given === null || given === undefined || given === '') return undefined;
  if (attribute(field, 'optype') === 'categorical') {
    const listed = field.children.map((value) => attribute(value, 'value'));
    return listed.includes(String(given)) ? String(given) : null;
  }
  const value = Number(given);
  if (!Number.isFinite(value)) return null;
  for (const interval of field.children) {
    const margin = Number(attribute(interval, 'leftMargin'));
    const closure = attribute(interval, 'closure');
    if (closure === 'openOpen' ? !(value > margin) : !(value >= margin)) return null;
  }
  return value;
}

function expression(node: XmlElement, values: ReadonlyMap<string, number | string>): number {
  switch (node.name) {
    case 'FieldRef':
      return numberIn(values, attribute(node, 'field'));
    case 'Constant':
      return Number(node.text);
    case 'NormDiscrete':
      return values.get(attribute(node, 'field')) === attribute(node, 'value') ? 1 : 0;
    case 'Apply': {
      const [first = Number.NaN, second = Number.NaN] = node.children.map((part) => expression(part, values));
      switch (attribute(node, 'function')) {
        case 'ln':
          return Math.log(first);
        case 'sqrt':
          return Math.sqrt(first);
        case 'pow':
          return first ** second;
      }
    }
  }
  throw new Error(`unknown expression ${node.name}`);
}

/** The sum of the regression equation, section "RegressionTable". */
function linear(table: XmlElement, values: ReadonlyMap<string, number | string>): number {
  let sum = Number(attribute(table, 'intercept'));
  expectOrder(table, ['NumericPredictor', 'CategoricalPredictor', 'PredictorTerm']);
  for (const predictor of table.children) {
    const coefficient = Number(attribute(predictor, 'coefficient'));
    if (predictor.name === 'NumericPredictor')
      sum += coefficient * numberIn(values, attribute(predictor, 'name'));
    else if (predictor.name === 'CategoricalPredictor')
      sum += values.get(attribute(predictor, 'name')) === attribute(predictor, 'value') ? coefficient : 0;
    else
      sum += predictor.children.reduce(
        (product, reference) => product * numberIn(values, attribute(reference, 'field')),
        coefficient,
      );
  }
  return sum;
}

function normalised(method: string, value: number): number {
  switch (method) {
    case 'none':
      return value;
    case 'logit':
      return 1 / (1 + Math.exp(-value));
    case 'exp':
      return Math.exp(value);
  }
  throw new Error(`normalization ${method}`);
}

function numberIn(values: ReadonlyMap<string, number | string>, name: string): number {
  const value = values.get(name);
  if (typeof value !== 'number') throw new Error(`the field ${name} is no number`);
  return value;
}

function attribute(node: XmlElement, name: string): string {
  const value = node.attributes.get(name);
  if (value === undefined) throw new Error(`${node.name} has no ${name}`);
  return value;
}

function child(node: XmlElement, name: string): XmlElement {
  const found = node.children.filter((one) => one.name === name);
  if (found.length !== 1 || found[0] === undefined)
    throw new Error(`${node.name} has ${found.length} ${name}`);
  return found[0];
}

function only(node: XmlElement): XmlElement {
  const [found, ...more] = node.children;
  if (found === undefined || more.length > 0) throw new Error(`${node.name} needs one child`);
  return found;
}

/** The schema's sequence. */
function expectOrder(node: XmlElement, order: readonly string[]): void {
  let at = 0;
  for (const { name } of node.children) {
    const place = order.indexOf(name);
    if (place < at) throw new Error(`${name} is out of place in ${node.name}`);
    at = place;
  }
}
